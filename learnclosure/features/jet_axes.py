"""Axes of jets as ridges of speed: their points, widths, and order along the flow."""

from __future__ import annotations

import heapq
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry
from learnclosure.features.nearest import Positions
from learnclosure.features.smoothing import running_mean

FloatArray = npt.NDArray[np.float64]
IndexArray = npt.NDArray[np.int64]

LEAST_CONTRAST = 0.02
"""An axis is faster than the median of the domain by at least this, m s-1."""
LEAST_SHARE = 0.1
"""And by this share of the excess of the fastest point of the domain."""
LEAST_PEAK_SHARE = 0.3
"""Share of that excess the fastest point of an axis has at least."""
LEAST_POINTS = 4
"""Axes of fewer points are no jets."""
LEAST_LENGTH = 1.5
"""Neither are axes shorter than this many of their widths."""
REACH = 2
"""Points of an axis are linked over at most this many cells along either axis."""
LEAST_ALIGNMENT = 0.3
"""Cosine of the angle between the flow at linked points, at least."""
STEP = 0.5
"""Step of the profiles across an axis, cells."""
LONGEST_PROFILE = 40
"""Length of the profiles to either side, cells."""
NOISE = 0.05
"""A profile that rises again by this share of its peak belongs to something else there."""


class JetAxes(NamedTuple):
    """Points of all axes.

    Attributes
    ----------
    row, column : ndarray of int, shape (point,)
        Cell of each point.
    offset : ndarray, shape (point,), m
        Distance of the axis from the centre of the cell, positive to the left of the flow.
    tangent_x, tangent_y : ndarray, shape (point,), 1
        Direction of the flow.
    speed : ndarray, shape (point,), m s-1
    width : ndarray, shape (point,), m
        ``W`` of the profile ``exp(-(d/W)^2)``.
    along : ndarray, shape (point,), m
        Distance downstream of the fastest point of the same axis.
    number : ndarray of int, shape (point,)
        Number of the axis.
    """

    row: IndexArray
    column: IndexArray
    offset: FloatArray
    tangent_x: FloatArray
    tangent_y: FloatArray
    speed: FloatArray
    width: FloatArray
    along: FloatArray
    number: IndexArray


Links = list[list[tuple[int, float, float]]]


class _Surface:
    """The smoothed flow of the top layer, and its values between cells."""

    def __init__(self, eastward: FloatArray, northward: FloatArray, geometry: Geometry) -> None:
        self.geometry = geometry
        self.wet = geometry.mask[0]
        weight = self.wet.astype(np.float64)
        parts = []
        for flow in (eastward * weight, northward * weight):
            smooth = running_mean(flow, weight, 0, geometry.periodic_y)
            parts.append(running_mean(smooth, weight, 1, geometry.periodic_x) * weight)
        self.u, self.v = parts
        self.speed = np.hypot(self.u, self.v)
        self.background = float(np.median(self.speed[self.wet])) if self.wet.any() else 0.0

    def speed_at(self, row: FloatArray, column: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Speed between cells, and whether there is sea; both by bilinear interpolation."""
        rows, columns = self.speed.shape
        low_row, low_column = np.floor(row).astype(np.int64), np.floor(column).astype(np.int64)
        total, sea = np.zeros(row.shape), np.zeros(row.shape)
        for down in (0, 1):
            for right in (0, 1):
                j, i = low_row + down, low_column + right
                share = np.abs(1 - down - (row - low_row)) * np.abs(
                    1 - right - (column - low_column)
                )
                inside = np.ones(row.shape, bool)
                if not self.geometry.periodic_y:
                    inside &= (j >= 0) & (j < rows)
                if not self.geometry.periodic_x:
                    inside &= (i >= 0) & (i < columns)
                share = np.where(inside & self.wet[j % rows, i % columns], share, 0.0)
                total += share * self.speed[j % rows, i % columns]
                sea += share
        return total, sea


class _Ridge(NamedTuple):
    row: IndexArray
    column: IndexArray
    tangent_x: FloatArray
    tangent_y: FloatArray
    step: FloatArray
    offset: FloatArray
    speed: FloatArray


def _ridge(surface: _Surface) -> _Ridge:
    """Find the cells that are faster than what lies a cell to the left and right of their flow."""
    excess = surface.speed - surface.background
    least = max(LEAST_CONTRAST, LEAST_SHARE * float(excess.max(initial=0.0)))
    row, column = np.nonzero(surface.wet & (excess > least))
    here = surface.speed[row, column]
    tangent_x, tangent_y = surface.u[row, column] / here, surface.v[row, column] / here
    dx, dy = surface.geometry.dx[row, column], surface.geometry.dy[row, column]
    # One cell to the left, whatever the shape of the cell.
    step = 1.0 / np.hypot(tangent_y / dx, tangent_x / dy)
    down, right = step * tangent_x / dy, -step * tangent_y / dx
    left, _ = surface.speed_at(row + down, column + right)
    right_hand, _ = surface.speed_at(row - down, column - right)
    curvature = left - 2.0 * here + right_hand
    top = (here >= left) & (here >= right_hand) & (curvature < 0.0)
    # The summit of the parabola through the three.
    share = 0.5 * (right_hand - left) / np.where(curvature < 0.0, curvature, -1.0)
    summit = here - 0.25 * (right_hand - left) * share
    parts = (row, column, tangent_x, tangent_y, step, share * step, summit)
    return _Ridge(*(part[top] for part in parts))


def _links(ridge: _Ridge, geometry: Geometry) -> Links:
    """Points linked to each point, with the distances downstream and straight to them in m."""
    rows, columns = geometry.dx.shape
    positions = Positions(geometry)
    place = np.full((rows, columns), -1)
    place[ridge.row, ridge.column] = np.arange(len(ridge.row))
    links: Links = [[] for _ in ridge.row]
    for down in range(-REACH, REACH + 1):
        for right in range(-REACH, REACH + 1):
            if not (down or right):
                continue
            row, column = ridge.row + down, ridge.column + right
            inside = np.ones(row.shape, bool)
            if not geometry.periodic_y:
                inside &= (row >= 0) & (row < rows)
            if not geometry.periodic_x:
                inside &= (column >= 0) & (column < columns)
            other = place[row % rows, column % columns]
            cosine = (
                ridge.tangent_x * ridge.tangent_x[other] + ridge.tangent_y * ridge.tangent_y[other]
            )
            linked = inside & (other >= 0) & (cosine > LEAST_ALIGNMENT)
            along_x, along_y = positions.way(ridge.row, ridge.column, row % rows, column % columns)
            mean_x = ridge.tangent_x + ridge.tangent_x[other]
            mean_y = ridge.tangent_y + ridge.tangent_y[other]
            size = np.where(linked, np.hypot(mean_x, mean_y), 1.0)
            distance = (along_x * mean_x + along_y * mean_y) / size
            for point in np.nonzero(linked)[0]:
                straight = float(np.hypot(along_x[point], along_y[point]))
                links[point].append((int(other[point]), float(distance[point]), straight))
    return links


def _order(ridge: _Ridge, links: Links) -> tuple[IndexArray, FloatArray]:
    """Give each axis a number, measure distances downstream from the fastest point of each."""
    number = np.full(len(ridge.row), -1)
    along = np.zeros(len(ridge.row))
    axes = 0
    for start in np.argsort(-ridge.speed, kind="stable"):
        if number[start] >= 0:
            continue
        # The shortest way from the fastest point decides, whatever the order of the cells.
        waiting = [(0.0, int(start), 0.0)]
        while waiting:
            length, point, downstream = heapq.heappop(waiting)
            if number[point] >= 0:
                continue
            number[point], along[point] = axes, downstream
            for other, distance, straight in links[point]:
                if number[other] < 0:
                    heapq.heappush(waiting, (length + straight, other, downstream + distance))
        axes += 1
    return number, along


def _half_width(excess: FloatArray, peak: FloatArray, distance: FloatArray) -> FloatArray:
    """Width of the profiles on one side; NaN where there is none.

    Followed outward until it falls below 1/e of the peak, rises again or ends, with the
    width of the Gaussian that has the value found there.
    """
    points, steps = excess.shape
    lowest = np.fmin.accumulate(excess, axis=1)
    rises = excess > lowest + NOISE * peak[:, None]
    stop = (excess < np.exp(-1.0) * peak[:, None]) | rises | ~np.isfinite(excess)
    last = np.where(stop.any(axis=1), np.argmax(stop, axis=1), steps - 1)
    every = np.arange(points)
    ended = rises[every, last] | ~np.isfinite(excess[every, last])
    # What rises or ends has its last word at the lowest value before.
    before = np.where(np.arange(steps) < last[:, None], excess, np.inf)
    last = np.where(ended, np.argmin(before, axis=1), last)
    value = excess[every, last]
    previous = np.maximum(last - 1, 0)
    inner = np.where(last > 0, excess[every, previous], peak)
    near = np.where(last > 0, distance[every, previous], 0.0)
    target = np.exp(-1.0) * peak
    crossed = (value < target) & (inner > value)
    share = np.where(crossed, (inner - target) / np.where(crossed, inner - value, 1.0), 1.0)
    at = near + share * (distance[every, last] - near)
    level = np.where(crossed, target, value)
    usable = np.isfinite(level) & (level > 0.0) & (level < 0.95 * peak)
    ratio = np.where(usable, peak / np.where(usable, level, 1.0), np.e)
    return np.where(usable, at / np.sqrt(np.log(ratio)), np.nan)


def _widths(surface: _Surface, ridge: _Ridge) -> FloatArray:
    """Width of the jet at every point of a ridge, m: the mean of both sides."""
    geometry = surface.geometry
    dx, dy = geometry.dx[ridge.row, ridge.column], geometry.dy[ridge.row, ridge.column]
    cells = STEP * np.arange(1, int(LONGEST_PROFILE / STEP) + 1)
    distance = ridge.step[:, None] * cells
    peak = ridge.speed - surface.background
    sides = []
    for sign in (1.0, -1.0):
        away = sign * distance + ridge.offset[:, None]
        row = ridge.row[:, None] + away * (ridge.tangent_x / dy)[:, None]
        column = ridge.column[:, None] - away * (ridge.tangent_y / dx)[:, None]
        speed, sea = surface.speed_at(row, column)
        excess = np.where(sea > 0.999, speed - surface.background, np.nan)
        # Beyond the first end of the sea nothing belongs to the jet.
        excess = np.where(np.logical_or.accumulate(np.isnan(excess), axis=1), np.nan, excess)
        sides.append(_half_width(excess, peak, distance))
    both = np.stack(sides)
    count = np.isfinite(both).sum(axis=0)
    mean = np.where(np.isfinite(both), both, 0.0).sum(axis=0) / np.maximum(count, 1)
    return np.where(count > 0, np.maximum(mean, ridge.step), ridge.step)


def _smooth_along(width: FloatArray, along: FloatArray) -> FloatArray:
    """Mean width within one median width up and down the axis."""
    order = np.argsort(along, kind="stable")
    ordered, reach = along[order], float(np.median(width))
    sums = np.concatenate([[0.0], np.cumsum(width[order])])
    first = np.searchsorted(ordered, along - reach, side="left")
    last = np.searchsorted(ordered, along + reach, side="right")
    return np.asarray((sums[last] - sums[first]) / (last - first))


def find_axes(eastward: FloatArray, northward: FloatArray, geometry: Geometry) -> JetAxes:
    """Find the axes of all jets of one layer.

    The flow is averaged over three cells each way first.

    Parameters
    ----------
    eastward, northward : ndarray, shape (y, x), m s-1
        Velocity along x and y; zero on land.
    geometry : Geometry
        Its top layer tells land from sea.

    Returns
    -------
    JetAxes
        Without points where nothing stands out from the median speed.
    """
    surface = _Surface(eastward, northward, geometry)
    ridge = _ridge(surface)
    number, along = _order(ridge, _links(ridge, geometry))
    width = _widths(surface, ridge)
    kept = np.full(len(ridge.row), -1)
    jets = 0
    weakest = surface.background + LEAST_PEAK_SHARE * (
        surface.speed.max(initial=0.0) - surface.background
    )
    for axis in range(int(number.max(initial=-1)) + 1):
        here = number == axis
        if here.sum() < LEAST_POINTS or ridge.speed[here].max() < weakest:
            continue
        if np.ptp(along[here]) < LEAST_LENGTH * np.median(width[here]):
            continue
        kept[here] = jets
        jets += 1
        width[here] = _smooth_along(width[here], along[here])
    keep = kept >= 0
    return JetAxes(
        row=ridge.row[keep],
        column=ridge.column[keep],
        offset=ridge.offset[keep],
        tangent_x=ridge.tangent_x[keep],
        tangent_y=ridge.tangent_y[keep],
        speed=ridge.speed[keep],
        width=width[keep],
        along=along[keep],
        number=kept[keep],
    )
