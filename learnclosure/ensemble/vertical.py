"""Vertical cells: their order, thickness, depth and fixed stratification."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.layout import LayoutReader
from learnclosure.ensemble.units import conversion
from learnclosure.errors import GridError

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

POSITIVE_BY_STANDARD_NAME = {"depth": "down", "height": "up", "altitude": "up"}


def is_top_last(reader: LayoutReader) -> bool:
    """Tell whether the surface is at the end of the vertical dimension.

    Parameters
    ----------
    reader : LayoutReader

    Returns
    -------
    bool
        From the study, else from the vertical coordinate and its direction.
    """
    if reader.layout.top is not None:
        return reader.layout.top == "last"
    name = reader.axes.layer
    if name is None or reader.layers < 2:
        return False
    if name in reader.dataset.variables:
        values = np.asarray(reader.dataset[name].values, dtype=np.float64)
        attributes = reader.dataset[name].attrs
        known = POSITIVE_BY_STANDARD_NAME.get(str(attributes.get("standard_name")), "")
        positive = str(attributes.get("positive", known)).lower()
        if positive in ("up", "down"):
            return bool((values[-1] > values[0]) == (positive == "up"))
    reader.assumptions.append("the first layer is the top one, since nothing says otherwise")
    return False


def cell_kind(reader: LayoutReader) -> Literal["layers", "levels"]:
    """Tell whether vertical cells move with the fluid.

    Parameters
    ----------
    reader : LayoutReader

    Returns
    -------
    {"layers", "levels"}
    """
    said = reader.layout.vertical or str(reader.dataset.attrs.get("vertical", ""))
    if said in ("layers", "levels"):
        return "layers" if said == "layers" else "levels"
    reader.assumptions.append("vertical cells stand still (levels), since nothing says otherwise")
    return "levels"


def _along_layers(
    reader: LayoutReader, values: FloatArray, count: int, part: str, top_last: bool
) -> FloatArray:
    """Spread one value for each layer, or a field, over (layer, y, x), the top one first."""
    full = (count, reader.rows, reader.columns)
    if values.ndim == 1:
        values = values[:, None, None]
    try:
        spread = np.array(np.broadcast_to(values, full)) if values.shape[0] == count else None
    except (ValueError, IndexError):
        spread = None
    if spread is None:
        raise GridError(
            f"'{part}' does not fit the vertical cells",
            where=reader.where,
            found=f"shape {values.shape}",
            expected=f"{count} values or a field of shape {full}",
            remedy=f"correct '{part}' under [ensemble.grid]",
        )
    return spread[::-1] if top_last else spread


def _from_bounds(reader: LayoutReader) -> FloatArray | None:
    """Thickness from the CF bounds of a vertical coordinate in units of length."""
    name = reader.axes.layer
    if name is None or name not in reader.dataset.variables:
        return None
    attributes = reader.dataset[name].attrs
    bounds = attributes.get("bounds")
    if bounds not in reader.dataset.variables:
        return None
    edges = np.asarray(reader.dataset[bounds].values, dtype=np.float64)
    change = conversion(reader.units_of(name, "m"), "m", f"{reader.where}: {name}")
    reader.used.append(str(bounds))
    return np.abs(change(edges[:, 1]) - change(edges[:, 0]))


def read_thickness(reader: LayoutReader, mask: BoolArray, top_last: bool) -> FloatArray:
    """Read the resting thickness of vertical cells.

    From the study, else from the variable with the standard name ``cell_thickness``,
    else from the bounds of the vertical coordinate.

    Parameters
    ----------
    reader : LayoutReader
    mask : ndarray of bool, shape (layer, y, x)
    top_last : bool

    Returns
    -------
    ndarray, shape (layer, y, x), m
        Zero on land.

    Raises
    ------
    GridError
        If it is unknown, does not fit or is not positive in the sea.
    """
    given: Any = reader.layout.layer_thickness
    if given is None:
        given = reader.standard("cell_thickness")
    if isinstance(given, str):
        values: FloatArray | None = reader.value(given, "m", "layer_thickness")
        if reader.axes.time is not None and reader.axes.time in reader.dataset[given].dims:
            # Members need not agree in a thickness that varies.
            reader.used.remove(given)
            reader.assumptions.append("the resting thickness is that of the first member")
    elif given is not None:
        values = np.asarray(given, dtype=np.float64)
    else:
        values = _from_bounds(reader)
    if values is None:
        raise GridError(
            "the layer thickness is unknown",
            where=reader.where,
            expected="a variable with the standard_name cell_thickness",
            remedy="name 'layer_thickness' under [ensemble.grid], as a variable or in m",
        )
    if values.ndim == 0 or (values.ndim == 2 and reader.axes.layer is None):
        values = values[None]
    whole = _along_layers(reader, values, reader.layers, "layer_thickness", top_last)
    wrong = int(np.count_nonzero(~(whole[mask] > 0.0)))
    if wrong:
        raise GridError(
            "vertical cells in the sea have no thickness",
            where=f"{reader.where}: layer_thickness",
            found=f"{wrong} cells",
            expected="positive thicknesses in m wherever the tracers are sea",
            remedy="correct the variable or the list",
        )
    return np.where(mask, whole, 0.0)


def read_depth(reader: LayoutReader, thickness: FloatArray) -> FloatArray:
    """Read the depth of the sea floor.

    Parameters
    ----------
    reader : LayoutReader
    thickness : ndarray, shape (layer, y, x), m

    Returns
    -------
    ndarray, shape (y, x), m
        Positive in the sea, zero on land.

    Raises
    ------
    GridError
        If a depth is missing or zero in the sea.
    """
    given: Any = reader.layout.sea_floor_depth
    if given is None:
        given = reader.standard("sea_floor_depth_below_geoid")
    if given is None:
        reader.assumptions.append("the sea floor lies below the lowest cell that is sea")
        return np.asarray(thickness.sum(axis=0))
    values = reader.value(given, "m", "sea_floor_depth") if isinstance(given, str) else given
    depth = np.abs(reader.surface(values, "sea_floor_depth"))
    sea = thickness.sum(axis=0) > 0.0
    wrong = int(np.count_nonzero(sea & ~(depth > 0.0)))
    if wrong:
        raise GridError(
            "the sea has no depth in places",
            where=f"{reader.where}: sea_floor_depth",
            found=f"{wrong} cells",
            expected="depths in m wherever the tracers are sea",
            remedy="correct the variable, or leave it out to use the layer thickness",
        )
    return np.where(sea, depth, 0.0)


def read_reduced_gravity(
    reader: LayoutReader, mask: BoolArray, top_last: bool
) -> FloatArray | None:
    """Read the reduced gravity at interfaces where it is fixed in time.

    Parameters
    ----------
    reader : LayoutReader
    mask : ndarray of bool, shape (layer, y, x)
    top_last : bool

    Returns
    -------
    ndarray, shape (layer - 1, y, x), m s-2, or None
        Zero below land.

    Raises
    ------
    GridError
        If it does not fit or is missing in the sea.
    """
    given: Any = reader.layout.reduced_gravity
    if given is None and "reduced_gravity" in reader.dataset.variables:
        given = "reduced_gravity"
    if given is None:
        return None
    if isinstance(given, str):
        values = reader.value(given, "m s-2", "reduced_gravity")
    else:
        values = np.asarray(given, dtype=np.float64)
    if values.ndim in (0, 2):
        values = values[None]
    whole = _along_layers(reader, values, reader.layers - 1, "reduced_gravity", top_last)
    both = mask[1:] & mask[:-1]
    wrong = int(np.count_nonzero(both & ~np.isfinite(whole)))
    if wrong:
        raise GridError(
            "the reduced gravity is missing in the sea",
            where=f"{reader.where}: reduced_gravity",
            found=f"{wrong} places",
            expected="a value at every interface between two cells that are sea",
            remedy="correct the variable, or give one number for each interface",
        )
    return np.where(np.isfinite(whole), whole, 0.0)
