"""Positions and widths of cells, and latitude, from coordinates or from the study."""

from __future__ import annotations

from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.layout import LayoutReader
from learnclosure.ensemble.units import conversion, measures_angle
from learnclosure.errors import GridError

FloatArray = npt.NDArray[np.float64]

EARTH_RADIUS = 6.371e6
"""Mean radius, m: a sphere of the Earth's volume."""


class Coordinates(NamedTuple):
    """Values along the two axes.

    Attributes
    ----------
    x, y : ndarray, shape (x,) and (y,)
        In m, or radians where ``angular``; NaN where the files hold no coordinate.
    angular : bool
        Whether they are longitude and latitude.
    """

    x: FloatArray
    y: FloatArray
    angular: bool


class Metric(NamedTuple):
    """Widths and positions of cells.

    Attributes
    ----------
    dx, dy : ndarray, shape (y, x), m
    x, y : ndarray, shape (x,) and (y,), m
    """

    dx: FloatArray
    dy: FloatArray
    x: FloatArray
    y: FloatArray


def _coordinate(reader: LayoutReader, name: str, size: int) -> tuple[FloatArray, bool]:
    """Return values along one axis and whether they are angles; NaN if there are none."""
    missing = np.full(size, np.nan)
    if name not in reader.dataset.variables:
        return missing, False
    units = reader.units_of(name, "m")
    if units.strip() in ("", "1"):
        return missing, False
    angle = measures_angle(units)
    change = conversion(units, "radian" if angle else "m", f"{reader.where}: {name}")
    values = change(np.asarray(reader.dataset[name].values, dtype=np.float64))
    return values, angle


def read_coordinates(reader: LayoutReader) -> Coordinates:
    """Read the coordinates of the tracers' two horizontal dimensions.

    Parameters
    ----------
    reader : LayoutReader

    Returns
    -------
    Coordinates

    Raises
    ------
    GridError
        If one is an angle and the other a length.
    UnitError
        If units are neither.
    """
    axes = reader.axes
    x, x_is_angle = _coordinate(reader, axes.x, reader.columns)
    y, y_is_angle = _coordinate(reader, axes.y, reader.rows)
    if x_is_angle != y_is_angle:
        raise GridError(
            "one coordinate is an angle and the other is not",
            where=f"{reader.where}: {axes.x}, {axes.y}",
            expected="both in degrees or both in a unit of length",
            remedy="correct their units attributes",
        )
    # Longitudes may pass the date line or Greenwich inside a region.
    return Coordinates(np.unwrap(x) if x_is_angle else x, y, x_is_angle)


def read_latitude(reader: LayoutReader, coordinates: Coordinates) -> FloatArray | None:
    """Read the latitude of cells where study or files know it.

    Parameters
    ----------
    reader : LayoutReader
    coordinates : Coordinates

    Returns
    -------
    ndarray, shape (y, x), radians, or None
    """
    given: Any = reader.layout.latitude
    if given is None and not coordinates.angular:
        given = reader.standard("latitude")
    if isinstance(given, str):
        return reader.surface(reader.value(given, "radian", "latitude"), "latitude")
    if given is not None:
        return reader.surface(np.radians(given), "latitude")
    return reader.surface(coordinates.y, "latitude") if coordinates.angular else None


def _spacing(values: FloatArray, where: str) -> FloatArray:
    """Widths of cells whose centres are given; the outermost as their neighbours."""
    if len(values) < 2 or not np.isfinite(values).all():
        raise GridError(
            "the cell width is unknown",
            where=where,
            expected="a coordinate of that name in km or degrees, or 'dx' and 'dy'",
            remedy="name 'dx' and 'dy' under [ensemble.grid]",
        )
    steps = np.diff(values)
    if not (steps > 0.0).all():
        raise GridError(
            "the coordinate does not grow along its axis",
            where=where,
            found=f"{values[0]:g} to {values[-1]:g}",
            expected="values that grow eastward along x and northward along y",
            remedy="reorder the file along this axis",
        )
    return np.concatenate([steps[:1], 0.5 * (steps[1:] + steps[:-1]), steps[-1:]])


def _given_width(reader: LayoutReader, part: str) -> FloatArray | None:
    given = getattr(reader.layout, part)
    if given is None:
        return None
    width: Any = reader.value(given, "m", part) if isinstance(given, str) else given
    return reader.surface(width, part)


def _width_along(
    reader: LayoutReader, part: str, values: FloatArray, name: str, scale: FloatArray | float
) -> FloatArray:
    width = _given_width(reader, part)
    if width is None:
        spacing = _spacing(values, f"{reader.where}: {name}")
        shaped = spacing[None, :] if part == "dx" else spacing[:, None]
        width = reader.surface(shaped * scale, part)
    if not (np.isfinite(width) & (width > 0.0)).all():
        raise GridError(
            "a cell width is not positive",
            where=f"{reader.where}: {part}",
            found=f"{np.count_nonzero(~(width > 0.0))} cells",
            expected="positive widths everywhere, on land too",
            remedy=f"correct '{part}' under [ensemble.grid] or the coordinate",
        )
    return width


def read_metric(reader: LayoutReader, coordinates: Coordinates) -> Metric:
    """Find the widths of cells from the study, else from the coordinates.

    Degrees become metres on a sphere: ``dx = a cos(latitude) d(longitude)``,
    ``dy = a d(latitude)``.

    Parameters
    ----------
    reader : LayoutReader
    coordinates : Coordinates

    Returns
    -------
    Metric

    Raises
    ------
    GridError
        If widths are unknown or not positive, or a coordinate does not grow.
    """
    x, y, angular = coordinates
    across: FloatArray | float = EARTH_RADIUS * np.cos(y)[:, None] if angular else 1.0
    along = EARTH_RADIUS if angular else 1.0
    dx = _width_along(reader, "dx", x, reader.axes.x, across)
    dy = _width_along(reader, "dy", y, reader.axes.y, along)
    if angular:
        return Metric(dx, dy, EARTH_RADIUS * float(np.cos(y.mean())) * x, EARTH_RADIUS * y)
    if not np.isfinite(x).all():
        x = np.cumsum(dx[0]) - 0.5 * dx[0]
    if not np.isfinite(y).all():
        y = np.cumsum(dy[:, 0]) - 0.5 * dy[:, 0]
        reader.assumptions.append("y = 0 at the first edge, since there is no coordinate along y")
    return Metric(dx, dy, x, y)
