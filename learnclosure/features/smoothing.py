"""Light smoothing of fields with land."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]


def running_mean(values: FloatArray, wet: FloatArray, axis: int, periodic: bool) -> FloatArray:
    """Average each cell and its sea neighbours on both sides along an axis.

    Parameters
    ----------
    values : ndarray, shape (..., y, x)
    wet : ndarray, shape (..., y, x)
        1 in the sea, 0 on land.
    axis : int
    periodic : bool
        Whether the last cell is the neighbour of the first.

    Returns
    -------
    ndarray, shape (..., y, x)
    """
    total, count = values * wet, wet.copy()
    for step in (1, -1):
        shifted, there = np.roll(values * wet, step, axis), np.roll(wet, step, axis)
        if not periodic:
            edge = [slice(None)] * values.ndim
            edge[axis] = slice(0, 1) if step > 0 else slice(-1, None)
            shifted[tuple(edge)] = 0.0
            there[tuple(edge)] = 0.0
        total, count = total + shifted, count + there
    return np.asarray(total / np.maximum(count, 1.0))
