"""Dimensions of fields and the faces velocities sit on."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.ensemble.roles import Roles
from learnclosure.errors import GridError
from learnclosure.study import EnsembleTable, GridLayout

FloatArray = npt.NDArray[np.float64]

ALONG = {"east": "x", "west": "x", "north": "y", "south": "y"}


@dataclass(frozen=True)
class Axes:
    """Names of the dimensions of the tracers.

    Attributes
    ----------
    x, y : str
    layer, time : str or None
        None where the fields have no such dimension.
    """

    x: str
    y: str
    layer: str | None
    time: str | None


def _by_attribute(dataset: xr.Dataset, dims: tuple[str, ...], axis: str) -> str | None:
    for dim in dims:
        if dim in dataset.variables and dataset[dim].attrs.get("axis") == axis:
            return dim
    return None


def _looks_like_time(dataset: xr.Dataset, dim: str) -> bool:
    if dim.lower() in ("time", "t"):
        return True
    attributes = dataset[dim].attrs if dim in dataset.variables else {}
    units = str(attributes.get("units", ""))
    return attributes.get("standard_name") == "time" or " since " in units


def find_axes(
    table: EnsembleTable, dataset: xr.Dataset, tracer: str, member: str | None, where: object
) -> Axes:
    """Find which dimension of a tracer is which.

    Parameters
    ----------
    table : EnsembleTable
    dataset : xarray.Dataset
    tracer : str
    member : str or None
        Member dimension, which is none of them.
    where : object
        File, for messages.

    Returns
    -------
    Axes

    Raises
    ------
    GridError
        If a named dimension is missing or the order is not (time, layer, y, x).
    """
    layout = table.grid
    dims = tuple(str(dim) for dim in dataset[tracer].dims if dim != member)
    for part in ("x", "y", "layer", "time"):
        named = getattr(layout, part)
        if named is not None and named not in dims:
            raise GridError(
                f"the dimension named by '{part}' is not one of the tracer's",
                where=f"{where}: {tracer}",
                found=", ".join(dims),
                expected=named,
                remedy=f"correct '{part}' under [ensemble.grid]",
            )
    x = layout.x or _by_attribute(dataset, dims, "X") or dims[-1]
    y = layout.y or _by_attribute(dataset, dims, "Y") or dims[-2]
    rest = [dim for dim in dims if dim not in (x, y)]
    time = layout.time or _by_attribute(dataset, dims, "T")
    if time is None:
        time = next((dim for dim in rest if _looks_like_time(dataset, dim)), None)
    left = [dim for dim in rest if dim != time]
    layer = layout.layer or (left[0] if left else None)
    expected = tuple(dim for dim in (time, layer, y, x) if dim is not None)
    if dims != expected:
        raise GridError(
            "the dimensions cannot be understood",
            where=f"{where}: {tracer}",
            found=f"({', '.join(dims)})",
            expected="(time, layer, y, x) in this order",
            remedy="name them under [ensemble.grid] or reorder the file",
        )
    return Axes(x, y, layer, time)


def check_faces(
    layout: GridLayout, dataset: xr.Dataset, roles: Roles, axes: Axes, where: object
) -> None:
    """Refuse velocities that sit elsewhere than the tracers without the study saying so.

    Parameters
    ----------
    layout : GridLayout
    dataset : xarray.Dataset
    roles : Roles
    axes : Axes
    where : object

    Raises
    ------
    GridError
        If a velocity's horizontal dimensions differ from the tracers' and no face is named.
    """
    for part in ("x_velocity", "y_velocity"):
        name = getattr(roles, part)
        own = tuple(str(dim) for dim in dataset[name].dims[-2:])
        face = layout.faces.get(part)
        if own != (axes.y, axes.x) and face in (None, "center"):
            raise GridError(
                "the velocity sits on other points than the tracers",
                where=f"{where}: {name}",
                found=f"dimensions ({', '.join(own)})",
                expected=f"({axes.y}, {axes.x}), or the face it sits on",
                remedy=f'name the face, e.g. faces = {{ {part} = "east" }} under [ensemble.grid]',
            )


def to_centres(values: FloatArray, face: str | None, size: int, periodic: bool) -> FloatArray:
    """Bring a velocity from the faces of cells to their centres.

    Land counts as zero transport, so a cell at the coast gets half the flow through its
    open face.

    Parameters
    ----------
    values : ndarray, shape (..., y, x)
        Not finite on land.
    face : str or None
        Face of the cell with the same index; None or ``"center"`` leaves values as they are.
    size : int
        Number of cells along the face's axis; one face more is understood.
    periodic : bool
        Whether the first and last cell are neighbours.

    Returns
    -------
    ndarray, shape (..., y, x)
        Zero on land.
    """
    clean = np.nan_to_num(values, nan=0.0)
    if face in (None, "center"):
        return clean
    assert face is not None
    axis = -1 if ALONG[face] == "x" else -2
    low, high = [slice(None)] * clean.ndim, [slice(None)] * clean.ndim
    low[axis], high[axis] = slice(None, -1), slice(1, None)
    if clean.shape[axis] == size + 1:
        return np.asarray(0.5 * (clean[tuple(low)] + clean[tuple(high)]))
    behind = face in ("east", "north")
    other = np.roll(clean, 1 if behind else -1, axis=axis)
    if not periodic:
        edge: list[Any] = [slice(None)] * clean.ndim
        edge[axis] = slice(0, 1) if behind else slice(-1, None)
        other[tuple(edge)] = 0.0
    return np.asarray(0.5 * (clean + other))
