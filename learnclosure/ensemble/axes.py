"""Dimensions of fields and the faces velocities sit on."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.ensemble.roles import Roles
from learnclosure.ensemble.upward import check_upward
from learnclosure.errors import GridError
from learnclosure.study import EnsembleTable, GridLayout

FloatArray = npt.NDArray[np.float64]

BoolArray = npt.NDArray[np.bool_]

ALONG = {"east": "x", "west": "x", "north": "y", "south": "y"}


class Cells(NamedTuple):
    """How many cells there are and which axes are periodic.

    Attributes
    ----------
    rows, columns : int
    periodic_x, periodic_y : bool
    """

    rows: int
    columns: int
    periodic_x: bool
    periodic_y: bool

    def along(self, face: str) -> tuple[int, int, bool]:
        """Return array axis, number of cells and periodicity across a face.

        Parameters
        ----------
        face : str
            A key of ``ALONG``.

        Returns
        -------
        int, int, bool
        """
        if ALONG[face] == "x":
            return -1, self.columns, self.periodic_x
        return -2, self.rows, self.periodic_y


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
    if len(dims) < 2:
        raise GridError(
            "a tracer has fewer than two dimensions",
            where=f"{where}: {tracer}",
            found=f"({', '.join(dims)})",
            expected="(time, layer, y, x)",
            remedy="name another variable under [ensemble.variables] tracers",
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


def check_points(
    layout: GridLayout, dataset: xr.Dataset, roles: Roles, axes: Axes, where: object
) -> None:
    """Refuse fields that sit elsewhere than the first tracer without the study saying so.

    Parameters
    ----------
    layout : GridLayout
    dataset : xarray.Dataset
    roles : Roles
    axes : Axes
    where : object
        File, for messages.

    Raises
    ------
    GridError
        If a scalar has other dimensions than the first tracer, or a velocity has and no
        face is named for it, or a face has neither as many points as there are cells nor
        one more.
    """
    first = dataset[roles.tracers[0]]
    for name in roles.scalars:
        if dataset[name].dims != first.dims:
            raise GridError(
                "a field sits on other points than the first tracer",
                where=f"{where}: {name}",
                found=f"dimensions ({_listed(dataset[name].dims)})",
                expected=f"({_listed(first.dims)}) as '{first.name}' has",
                remedy="name fields at the centres of cells only",
            )
    for part in ("x_velocity", "y_velocity"):
        _check_velocity(layout.faces.get(part), dataset, getattr(roles, part), first, axes, where)
    if roles.z_velocity is not None:
        check_upward(
            layout.faces.get("z_velocity"), dataset[roles.z_velocity], first, axes.layer, where
        )


def _check_velocity(
    face: str | None,
    dataset: xr.Dataset,
    name: str,
    first: xr.DataArray,
    axes: Axes,
    where: object,
) -> None:
    own = dataset[name]
    here, there = _horizontal_coordinates(own), _horizontal_coordinates(first)
    elsewhere = own.dims != first.dims or bool(here and there and here.isdisjoint(there))
    if face in (None, "center") and elsewhere:
        shown = own.dims if own.dims != first.dims else sorted(here)
        raise GridError(
            "the velocity sits on other points than the tracers",
            where=f"{where}: {name}",
            found=f"({_listed(shown)})",
            expected=f"({_listed(first.dims)}), or the face it sits on",
            remedy='name faces = { x_velocity = "east", y_velocity = "north" } or the like '
            "under [ensemble.grid]",
        )
    allowed = [first.sizes[dim] for dim in first.dims]
    grown = {"x": len(allowed) - 1, "y": len(allowed) - 2}[ALONG[face]] if face in ALONG else None
    fits = own.ndim == first.ndim and all(
        size == allowed[place] or (place == grown and size == allowed[place] + 1)
        for place, size in enumerate(own.shape)
    )
    if own.dims[:-2] != first.dims[:-2] or not fits:
        raise GridError(
            "the velocity does not fit the cells of the tracers",
            where=f"{where}: {name}",
            found=f"{dict(own.sizes)}",
            expected=f"{dict(first.sizes)}, or one more along {axes.x} or {axes.y} on faces",
            remedy="check which variable is named, and its face under [ensemble.grid]",
        )


def _listed(names: Iterable[Any]) -> str:
    return ", ".join(str(name) for name in names)


def _horizontal_coordinates(array: xr.DataArray) -> set[str]:
    """Names of the two-dimensional latitudes and longitudes a field declares."""
    return {
        str(name)
        for name, variable in array.coords.items()
        if variable.ndim == 2 and variable.attrs.get("standard_name") in ("latitude", "longitude")
        and name in str(array.encoding.get("coordinates", "")).split()
    }  # fmt: skip


def to_centres(values: FloatArray, face: str | None, cells: Cells) -> FloatArray:
    """Bring a velocity from the faces of cells to their centres.

    Land counts as zero transport, so a cell at the coast gets half the flow through its
    open face.

    Parameters
    ----------
    values : ndarray, shape (..., y, x)
        Not finite on land.
    face : str or None
        Face of the cell with the same index; None or ``"center"`` leaves values as they are.
    cells : Cells

    Returns
    -------
    ndarray, shape (..., y, x)
        Zero on land.
    """
    clean = np.nan_to_num(values, nan=0.0)
    if face not in ALONG:
        return clean
    axis, size, periodic = cells.along(face)
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


def between_cells(mask: BoolArray, face: str, points: int, cells: Cells) -> BoolArray:
    """Tell on which faces of cells there is sea on both sides.

    Parameters
    ----------
    mask : ndarray of bool, shape (layer, y, x)
        True in the sea.
    face : str
    points : int
        Number of faces along their axis: as many as cells, or one more.
    cells : Cells

    Returns
    -------
    ndarray of bool, shape of the velocity on that face
    """
    axis, size, periodic = cells.along(face)
    ahead = np.roll(mask, -1, axis=axis)
    if not periodic:
        edge: list[Any] = [slice(None)] * mask.ndim
        edge[axis] = slice(-1, None)
        ahead[tuple(edge)] = False
    high_face = mask & ahead
    if points == size + 1:
        return np.concatenate([np.take(high_face, [-1], axis=axis), high_face], axis=axis)
    return high_face if face in ("east", "north") else np.roll(high_face, 1, axis=axis)
