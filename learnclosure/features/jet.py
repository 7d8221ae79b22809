"""Where the jet is, how wide and how fast, and how far each column is from its axis.

Found section by section, which takes one jet that keeps its direction; for meanders that
turn back and for several jets see ``learnclosure.features.beside_jet``.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.features.mean_state import MeanState
from learnclosure.features.smoothing import running_mean

FloatArray = npt.NDArray[np.float64]

LARGEST_DISTANCE = 10.0
"""Distances from the axis are limited to this many jet widths."""
LEAST_CONTRAST = 0.02
"""A jet stands out from the median flow of its section by at least this, m s-1."""


class Jet(NamedTuple):
    """The jet of the top layer, as fields on (y, x).

    Attributes
    ----------
    distance : ndarray, 1
        Distance from the axis over the jet's width, positive to the left of the flow.
    speed : ndarray, m s-1
        Speed on the axis of the section through the cell.
    width : ndarray, m
        ``W`` of the profile ``exp(-(d/W)^2)`` with the same second moment.
    found : ndarray of bool
        False where the section has no jet; the distance is zero there.
    """

    distance: FloatArray
    speed: FloatArray
    width: FloatArray
    found: npt.NDArray[np.bool_]


def _sections(
    flow: FloatArray, width: FloatArray, wet: FloatArray, periodic: bool, left: float
) -> Jet:
    """Analyse sections that run along the first axis of (across, along) fields.

    ``left`` is 1 if the left of a positive flow lies towards larger indices, else -1.
    """
    speed = np.abs(flow) * wet
    excess = np.maximum(speed - np.median(speed, axis=0), 0.0)
    axis_row = np.argmax(speed, axis=0)
    along = np.arange(flow.shape[1])
    position = np.cumsum(width, axis=0) - 0.5 * width
    offset = position - position[axis_row, along]
    if periodic:
        length = width.sum(axis=0)
        offset = offset - length * np.round(offset / length)
    peak = speed[axis_row, along]
    weight = excess * excess
    total = weight.sum(axis=0)
    # The square of exp(-(d/W)^2) has the variance W^2 / 4.
    second = (weight * offset * offset).sum(axis=0) / np.where(total > 0.0, total, 1.0)
    jet_width = np.maximum(2.0 * np.sqrt(second), width.mean(axis=0))
    found = excess[axis_row, along] > LEAST_CONTRAST
    sign = left * np.where(flow[axis_row, along] < 0.0, -1.0, 1.0)
    distance = np.clip(sign * offset / jet_width, -LARGEST_DISTANCE, LARGEST_DISTANCE)
    spread = np.ones_like(flow)
    return Jet(
        distance=np.where(found, distance, 0.0),
        speed=peak * spread,
        width=jet_width * spread,
        found=np.asarray(found & (spread > 0.0)),
    )


def find_jet(state: MeanState) -> Jet:
    """Find the jet of the top layer section by section.

    Sections cross the direction, x or y, along which the layer has more kinetic energy;
    the flow is smoothed over three cells each way, the axis is its fastest point.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    Jet
    """
    geometry = state.geometry
    wet = geometry.mask[0].astype(np.float64)
    eastward, northward = state.x_velocity[0] * wet, state.y_velocity[0] * wet
    along_x = np.sum(eastward**2) >= np.sum(northward**2)
    flow = eastward if along_x else northward
    flow = running_mean(flow, wet, 0, geometry.periodic_y)
    flow = running_mean(flow, wet, 1, geometry.periodic_x)
    if along_x:
        # North lies to the left of an eastward flow.
        return _sections(flow, geometry.dy, wet, geometry.periodic_y, 1.0)
    # West lies to the left of a northward flow.
    turned = _sections(flow.T, geometry.dx.T, wet.T, geometry.periodic_x, -1.0)
    return Jet(turned.distance.T, turned.speed.T, turned.width.T, turned.found.T)
