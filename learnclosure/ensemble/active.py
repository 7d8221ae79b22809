"""Fields that act on the flow: potential vorticity, layer thickness and what follows from it."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.errors import GridError, RoleError, SourceError
from learnclosure.study import EnsembleTable

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

PARTS = ("potential_vorticity", "thickness")
"""Parts a variable of the files may play."""

ACTIVE = (*PARTS, "interface_height", "buoyancy")
"""All names of active fields, those that follow from others included."""


def find_active(
    table: EnsembleTable, dataset: xr.Dataset, tracers: tuple[str, ...], where: object
) -> dict[str, str | None]:
    """Find the variables of potential vorticity and of the time-varying thickness.

    From the study, else from the attribute ``active_role``, else, for the thickness, from
    the standard name ``cell_thickness`` on the dimensions of the tracers.

    Parameters
    ----------
    table : EnsembleTable
    dataset : xarray.Dataset
        First member.
    tracers : tuple of str
        All tracers, withheld ones included.
    where : object
        File, for messages.

    Returns
    -------
    dict of str to str or None
        Name of the variable, by part.

    Raises
    ------
    RoleError
        If a named variable is missing or a tracer has the name of an active field.
    """
    clash = [name for name in tracers if name in ACTIVE]
    if clash:
        raise RoleError(
            "a tracer has the name of a field that acts on the flow",
            where=f"{where}: {clash[0]}",
            expected="passive tracers",
            remedy="leave it out of 'tracers' and 'withheld_tracers', or rename it",
        )
    found: dict[str, str | None] = {}
    for part in PARTS:
        named = getattr(table.variables, part)
        if named is not None and named not in dataset.variables:
            raise RoleError(
                f"the variable named by '[ensemble.variables] {part}' is missing",
                where=f"{where}: {named}",
                found=", ".join(str(other) for other in dataset.variables),
                expected=named,
                remedy=f"correct '{part}' in the study",
            )
        found[part] = named or _by_attributes(dataset, part, dataset[tracers[0]].dims)
    return found


def _by_attributes(dataset: xr.Dataset, part: str, dims: tuple[Any, ...]) -> str | None:
    fields = {
        str(name): variable.attrs
        for name, variable in dataset.data_vars.items()
        if variable.dims == dims
    }
    by_role = [name for name, attributes in fields.items() if attributes.get("active_role") == part]
    if len(by_role) == 1 or part != "thickness":
        return by_role[0] if len(by_role) == 1 else None
    named = [
        name
        for name, attributes in fields.items()
        if attributes.get("standard_name") == "cell_thickness"
    ]
    return named[0] if len(named) == 1 and len(dims) == 4 else None


def left_out_gradients(
    table: EnsembleTable,
    dataset: xr.Dataset,
    names: Mapping[str, str],
    factors: Mapping[str, float],
    shape: tuple[int, bool],
    assumptions: list[str],
) -> dict[str, FloatArray]:
    """Read the uniform gradients that periodic fields leave out.

    Parameters
    ----------
    table : EnsembleTable
        The study's own numbers come first.
    dataset : xarray.Dataset
        First member; attributes ``left_out_gradient_x`` and ``left_out_gradient_y``.
    names : mapping of str to str
        Variables by part.
    factors : mapping of str to float
        From the units of the files to SI, by part.
    shape : tuple of int and bool
        Number of layers, and whether the files have the top layer last.
    assumptions : list of str
        What is assumed is added here.

    Returns
    -------
    dict of str to ndarray, shape (2, layer), SI units per metre
        By part; ``interface_height`` follows from the thickness.

    Raises
    ------
    GridError
        If there is neither one number nor one a layer.
    """
    layers, top_last = shape
    result = {}
    for part, name in names.items():
        said = getattr(table.grid, f"{part}_gradient")
        attributes = dataset[name].attrs
        given = {
            "x": attributes.get("left_out_gradient_x", 0.0),
            "y": said if said is not None else attributes.get("left_out_gradient_y", 0.0),
        }
        if said is None and "left_out_gradient_y" not in attributes:
            assumptions.append(f"'{name}' holds all of its own mean gradient")
        values = []
        for axis, numbers in given.items():
            array = np.atleast_1d(np.asarray(numbers, dtype=np.float64)) * factors[part]
            if array.shape not in ((1,), (layers,)) or not np.isfinite(array).all():
                raise GridError(
                    f"the gradient along {axis} that '{name}' leaves out does not fit its layers",
                    where=f"ensemble '{table.name}'",
                    found=f"{array.size} numbers",
                    expected=f"one finite number, or one for each of {layers} layers",
                    remedy=f"set '{part}_gradient' under [ensemble.grid]",
                )
            spread = np.broadcast_to(array, (layers,))
            values.append(spread[::-1] if top_last else spread)
        result[part] = np.stack(values)
    if "thickness" in result:
        below = result["thickness"][:, ::-1].cumsum(axis=1)[:, ::-1] - result["thickness"]
        result["interface_height"] = below
    return result


def interface_height(thickness: FloatArray, sea_floor_depth: FloatArray) -> FloatArray:
    """Height of the interface below each layer above the resting surface.

    Parameters
    ----------
    thickness : ndarray, shape (..., layer, y, x), m
    sea_floor_depth : ndarray, shape (y, x), m

    Returns
    -------
    ndarray, shape (..., layer, y, x), m
        The thicknesses of all layers below, less the depth; the sea floor itself below the
        lowest layer.
    """
    upward = thickness[..., ::-1, :, :].cumsum(axis=-3)[..., ::-1, :, :]
    return np.asarray(upward - thickness - sea_floor_depth)


def check_thickness(values: FloatArray, mask: BoolArray, where: str, time: int) -> None:
    """Refuse layers that vanish.

    Parameters
    ----------
    values : ndarray, shape (layer, y, x), m
    mask : ndarray of bool, shape (layer, y, x)
    where : str
        File and variable, for the message.
    time : int

    Raises
    ------
    SourceError
        If a thickness in the sea is zero or negative.
    """
    wrong = values[mask] <= 0.0
    count = int(np.count_nonzero(wrong))
    if count:
        raise SourceError(
            "layers vanish or are turned over",
            where=where,
            found=f"{count} thicknesses down to {float(values[mask].min()):.6g} m "
            f"at time number {time}",
            expected="positive thicknesses in m wherever the tracers are sea",
            remedy="mask cells without the layer in all fields, or correct the variable",
        )
