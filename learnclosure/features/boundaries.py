"""Distance to coasts and walls."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry
from learnclosure.features.nearest import Positions, nearest_marked

FloatArray = npt.NDArray[np.float64]

FARTHEST = 1e7
"""Largest distance, m; stands in where there is neither coast nor wall."""


def land_distance(geometry: Geometry) -> FloatArray:
    """Distance from the centre of each cell to the nearest coast or wall.

    Parameters
    ----------
    geometry : Geometry
        Land is what is not sea in the top layer; the edges of axes that are not periodic
        are walls.

    Returns
    -------
    ndarray, shape (y, x), m
        At most 1e7; on land what a cell at the coast has.
    """
    nearest = nearest_marked(~geometry.mask[0], geometry)
    # From the centre of the land cell to its side, along the way to it.
    larger = np.maximum(np.abs(nearest.along_x), np.abs(nearest.along_y))
    with np.errstate(invalid="ignore"):
        distance = np.hypot(nearest.along_x, nearest.along_y)
        lengthwise = distance / np.where(larger > 0.0, larger, 1.0)
    size = np.where(np.abs(nearest.along_x) >= np.abs(nearest.along_y), geometry.dx, geometry.dy)
    inside = np.where(np.isfinite(distance), 0.5 * size * np.nan_to_num(lengthwise, nan=1.0), 0.0)
    distance = np.maximum(distance - inside, 0.5 * size)
    positions = Positions(geometry)
    if not geometry.periodic_x:
        distance = np.minimum(
            distance, np.minimum(positions.x, positions.length_x[:, None] - positions.x)
        )
    if not geometry.periodic_y:
        distance = np.minimum(distance, np.minimum(positions.y, positions.length_y - positions.y))
    return np.asarray(np.minimum(distance, FARTHEST))
