"""The horizontal and vertical grid of one region, as every later stage sees it."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]


@dataclass(frozen=True)
class Geometry:
    """What finite differences on one grid need.

    Attributes
    ----------
    dx, dy : ndarray, shape (y, x), m
        Widths of the cells along x and y.
    mask : ndarray of bool, shape (layer, y, x)
        True where a cell is sea.
    periodic_x, periodic_y : bool
        Whether the last cell is the neighbour of the first.
    """

    dx: FloatArray
    dy: FloatArray
    mask: BoolArray
    periodic_x: bool
    periodic_y: bool

    @property
    def area(self) -> FloatArray:
        """Cell area, shape (y, x), m2."""
        return self.dx * self.dy


@dataclass(frozen=True)
class Grid:
    """Grid of one region: layers are ordered from the top down, y grows northward.

    Attributes
    ----------
    x, y : ndarray, shape (x,) and (y,), m
        Positions of the cell centres along the model axes.
    geometry : Geometry
        Cell widths, sea mask and periodic axes.
    layer_thickness : ndarray, shape (layer, y, x), m
        Resting thickness, zero on land.
    reduced_gravity : ndarray or None, shape (layer - 1, y, x), m s-2
        Reduced gravity at the interfaces if it is fixed in time; otherwise it comes
        from the ensemble's mean buoyancy.
    coriolis_parameter : ndarray, shape (y, x), s-1
    planetary_beta_x, planetary_beta_y : ndarray, shape (y, x), m-1 s-1
        Gradient of the Coriolis parameter along the model axes.
    sea_floor_depth : ndarray, shape (y, x), m
        Depth of the sea floor, positive, zero on land.
    vertical : {"layers", "levels"}
        Whether vertical cells move with the fluid or stand still.
    """

    x: FloatArray
    y: FloatArray
    geometry: Geometry
    layer_thickness: FloatArray
    reduced_gravity: FloatArray | None
    coriolis_parameter: FloatArray
    planetary_beta_x: FloatArray
    planetary_beta_y: FloatArray
    sea_floor_depth: FloatArray
    vertical: Literal["layers", "levels"]

    @property
    def shape(self) -> tuple[int, int, int]:
        """Number of layers, rows and columns."""
        layers, rows, columns = self.geometry.mask.shape
        return layers, rows, columns

    def of_rows(self, rows: slice | npt.NDArray[np.int64]) -> Grid:
        """Return the grid of some rows; it has walls to the north and south.

        Parameters
        ----------
        rows : slice or ndarray of int

        Returns
        -------
        Grid
        """
        geometry, gravity = self.geometry, self.reduced_gravity
        return replace(
            self,
            y=self.y[rows],
            geometry=Geometry(
                dx=geometry.dx[rows],
                dy=geometry.dy[rows],
                mask=geometry.mask[:, rows],
                periodic_x=geometry.periodic_x,
                periodic_y=False,
            ),
            layer_thickness=self.layer_thickness[:, rows],
            reduced_gravity=None if gravity is None else gravity[:, rows],
            coriolis_parameter=self.coriolis_parameter[rows],
            planetary_beta_x=self.planetary_beta_x[rows],
            planetary_beta_y=self.planetary_beta_y[rows],
            sea_floor_depth=self.sea_floor_depth[rows],
        )


def _neighbour(field: npt.NDArray[Any], axis: int, step: int, periodic: bool) -> npt.NDArray[Any]:
    """Return the field of each cell's neighbour ``step`` cells up ``axis``; zero outside."""
    shifted = np.roll(field, -step, axis=axis)
    if not periodic:
        edge: list[slice] = [slice(None)] * field.ndim
        edge[axis] = slice(-1, None) if step > 0 else slice(0, 1)
        shifted[tuple(edge)] = 0
    return shifted


def _derivative(
    field: FloatArray, width: FloatArray, mask: BoolArray, axis: int, periodic: bool
) -> FloatArray:
    values = np.where(mask, field, 0.0)
    width_axis = axis + width.ndim
    mask_axis = axis + mask.ndim
    wet_ahead = mask & _neighbour(mask, mask_axis, 1, periodic)
    wet_behind = mask & _neighbour(mask, mask_axis, -1, periodic)
    gap_ahead = 0.5 * (width + _neighbour(width, width_axis, 1, periodic))
    gap_behind = 0.5 * (width + _neighbour(width, width_axis, -1, periodic))
    value_axis = axis + values.ndim
    ahead = np.where(wet_ahead, _neighbour(values, value_axis, 1, periodic) - values, 0.0)
    behind = np.where(wet_behind, values - _neighbour(values, value_axis, -1, periodic), 0.0)
    gap = np.where(wet_ahead, gap_ahead, 0.0) + np.where(wet_behind, gap_behind, 0.0)
    return np.asarray((ahead + behind) / np.where(gap > 0.0, gap, 1.0), dtype=np.float64)


def gradient(field: FloatArray, geometry: Geometry) -> tuple[FloatArray, FloatArray]:
    """Gradient at cell centres: centred in the open sea, one-sided at coasts and walls.

    Parameters
    ----------
    field : ndarray, shape (..., layer, y, x)
        Values at cell centres; what stands on land is ignored.
    geometry : Geometry

    Returns
    -------
    along_x, along_y : ndarray, shape (..., layer, y, x)
        Units of the field per metre; zero on land and where a cell has no sea
        neighbour along the axis.

    Examples
    --------
    >>> import numpy as np
    >>> width = np.full((3, 4), 10.0)
    >>> box = Geometry(width, width, np.ones((1, 3, 4), bool), False, False)
    >>> slope = np.arange(4.0) * np.ones((1, 3, 4))
    >>> gradient(slope, box)[0][0, 0]
    array([0.1, 0.1, 0.1, 0.1])
    """
    return (
        _derivative(field, geometry.dx, geometry.mask, -1, geometry.periodic_x),
        _derivative(field, geometry.dy, geometry.mask, -2, geometry.periodic_y),
    )


def divergence(along_x: FloatArray, along_y: FloatArray, geometry: Geometry) -> FloatArray:
    """Divergence of a cell-centred flux by finite volumes; no flux through coasts.

    Parameters
    ----------
    along_x, along_y : ndarray, shape (..., layer, y, x)
        Flux components at cell centres; what stands on land is ignored.
    geometry : Geometry

    Returns
    -------
    ndarray, shape (..., layer, y, x)
        Units of the flux per metre; its area integral vanishes to rounding.
    """

    def through_far_face(flux: FloatArray, length: FloatArray, axis: int, periodic: bool) -> Any:
        wet = geometry.mask & _neighbour(geometry.mask, axis + 3, 1, periodic)
        clean = np.where(geometry.mask, flux, 0.0)
        mean = 0.5 * (clean + _neighbour(clean, axis + clean.ndim, 1, periodic))
        side = 0.5 * (length + _neighbour(length, axis + 2, 1, periodic))
        return np.where(wet, mean * side, 0.0)

    east = through_far_face(along_x, geometry.dy, -1, geometry.periodic_x)
    north = through_far_face(along_y, geometry.dx, -2, geometry.periodic_y)
    out_of_x = east - _neighbour(east, east.ndim - 1, -1, geometry.periodic_x)
    out_of_y = north - _neighbour(north, north.ndim - 2, -1, geometry.periodic_y)
    return np.asarray((out_of_x + out_of_y) / geometry.area, dtype=np.float64)
