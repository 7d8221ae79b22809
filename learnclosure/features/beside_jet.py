"""Where the jets are, how wide and how fast, and where each column lies beside them.

An axis is a ridge of the speed of the top layer: a line of cells faster than what lies to
the left and to the right of their own flow. It follows meanders, and there may be several.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.features.jet_axes import JetAxes, find_axes
from learnclosure.features.mean_state import MeanState
from learnclosure.features.nearest import nearest_marked

FloatArray = npt.NDArray[np.float64]

LARGEST_DISTANCE = 10.0
"""Distances from the axis are limited to this many jet widths."""
LARGEST_ALONG_DISTANCE = 100.0
"""Distances along the axis are limited to this many jet widths."""


class BesideJet(NamedTuple):
    """The nearest jet of the top layer, as fields on (y, x).

    Attributes
    ----------
    distance : ndarray, 1
        Distance from the axis over the jet's width, positive to the left of the flow.
    speed : ndarray, m s-1
        Speed on the nearest part of the axis.
    width : ndarray, m
        ``W`` of the profile ``exp(-(d/W)^2)`` there.
    axis_x, axis_y : ndarray, 1
        Direction of the flow there.
    along : ndarray, 1
        Distance downstream of the fastest point of the axis, over the jet's width.
    number : ndarray of int
        Number of the jet, from 0; -1 where there is none.
    found : ndarray of bool
        False where there is no jet in the whole domain; everything is zero there.
    """

    distance: FloatArray
    speed: FloatArray
    width: FloatArray
    axis_x: FloatArray
    axis_y: FloatArray
    along: FloatArray
    number: npt.NDArray[np.int64]
    found: npt.NDArray[np.bool_]


def _no_jet(shape: tuple[int, ...]) -> BesideJet:
    zero = np.zeros(shape)
    return BesideJet(
        zero, zero, zero, zero, zero, zero, np.full(shape, -1, np.int64), np.zeros(shape, bool)
    )


def place_beside_jets(state: MeanState) -> BesideJet:
    """Find the jets of the top layer and place every column beside the nearest.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    BesideJet
    """
    shape = state.geometry.dx.shape
    axes = find_axes(state.x_velocity[0], state.y_velocity[0], state.geometry)
    if not len(axes.row):
        return _no_jet(shape)
    marked = np.zeros(shape, bool)
    marked[axes.row, axes.column] = True
    place = np.full(shape, -1)
    place[axes.row, axes.column] = np.arange(len(axes.row))
    speed = np.zeros(shape)
    speed[axes.row, axes.column] = axes.speed
    nearest = nearest_marked(marked, state.geometry, speed)
    which = place[nearest.row, nearest.column]
    return _beside(axes, which, nearest.along_x, nearest.along_y, state)


def _beside(
    axes: JetAxes,
    which: npt.NDArray[np.int64],
    along_x: FloatArray,
    along_y: FloatArray,
    state: MeanState,
) -> BesideJet:
    """Place cells beside their points of the axes, given the way from those cells."""
    tangent_x, tangent_y = axes.tangent_x[which], axes.tangent_y[which]
    # The axis passes its cell at this distance to the left of the centre.
    left = -tangent_y * along_x + tangent_x * along_y - axes.offset[which]
    ahead = tangent_x * along_x + tangent_y * along_y
    cell = np.sqrt(state.geometry.area)
    # Within a cell of the point the axis itself goes on; beyond that it has come to an end.
    past_end = np.maximum(np.abs(ahead) - cell, 0.0)
    width = axes.width[which]
    size = np.hypot(left, past_end) / width
    downstream = (axes.along[which] + np.clip(ahead, -cell, cell)) / width
    return BesideJet(
        distance=np.where(left < 0.0, -1.0, 1.0) * np.minimum(size, LARGEST_DISTANCE),
        speed=axes.speed[which],
        width=width,
        axis_x=tangent_x,
        axis_y=tangent_y,
        along=np.clip(downstream, -LARGEST_ALONG_DISTANCE, LARGEST_ALONG_DISTANCE),
        number=axes.number[which],
        found=np.ones(which.shape, bool),
    )
