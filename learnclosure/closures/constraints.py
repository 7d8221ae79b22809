"""Bounds every predicted transport tensor obeys, written once for NumPy and the graph."""

from __future__ import annotations

from typing import Any

TINY = 1e-30
"""Stands in for a vanishing eigenvalue difference, where nothing is to be rotated."""


def clip(xp: Any, values: Any, lowest: float, highest: float) -> Any:
    """Limit values to an interval.

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    values : array
    lowest, highest : float

    Returns
    -------
    array
    """
    return xp.minimum(xp.maximum(values, lowest), highest)


def bounded_tensor(
    xp: Any, nn: Any, tt: Any, nt: Any, alpha: Any, floor: float, cap: float
) -> tuple[Any, Any, Any, Any]:
    """Limit the eigenvalues of the symmetric part and the size of the antisymmetric part.

    The symmetric part keeps its principal axes; its eigenvalues are clipped into
    ``[floor, cap]``, which is the nearest admissible tensor in the Frobenius norm
    (Higham 1988, Linear Algebra Appl. 103, 103-118, for the floor).

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    nn, tt, nt : array, m2 s-1
        Components of the symmetric part.
    alpha : array, m2 s-1
        Antisymmetric part.
    floor, cap : float, m2 s-1
        Bounds of the eigenvalues; ``cap`` also bounds the size of ``alpha``.

    Returns
    -------
    nn, tt, nt, alpha : array, m2 s-1

    Examples
    --------
    >>> import numpy as np
    >>> bounds = bounded_tensor(np, np.float64(-300.0), np.float64(800.0), 0.0, 9e9, 50.0, 5e4)
    >>> [float(value) for value in bounds]
    [50.0, 800.0, 0.0, 50000.0]
    """
    mean = 0.5 * (nn + tt)
    difference = 0.5 * (nn - tt)
    radius = xp.sqrt(difference * difference + nt * nt)
    high = clip(xp, mean + radius, floor, cap)
    low = clip(xp, mean - radius, floor, cap)
    new_mean = 0.5 * (high + low)
    # Clipping never widens the gap between eigenvalues, so this stays within [0, 1]
    # where they are equal.
    shrink = 0.5 * (high - low) / xp.maximum(radius, TINY)
    new_difference = difference * shrink
    return (
        new_mean + new_difference,
        new_mean - new_difference,
        nt * shrink,
        clip(xp, alpha, -cap, cap),
    )
