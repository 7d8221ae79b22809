"""Quadratic minimisation over numbers that are not negative, with sparse matrices."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.sparse import csc_matrix
from scipy.sparse.linalg import splu

from learnclosure.errors import DiagnosisError

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

FULL_EXCHANGES = 5
"""Rounds without progress after which one number at a time changes sides."""

MOST_ROUNDS = 500
TOLERANCE = 1e-9


def minimise_nonnegative(
    matrix: csc_matrix, right: FloatArray, start: BoolArray | None = None
) -> FloatArray:
    """Minimise ``x^T H x / 2 - b^T x`` over ``x >= 0``.

    Parameters
    ----------
    matrix : scipy.sparse.csc_matrix, shape (n, n)
        H, symmetric and positive definite.
    right : ndarray, shape (n,)
        b.
    start : ndarray of bool, shape (n,), optional
        Numbers first taken as positive.

    Returns
    -------
    ndarray, shape (n,)

    Raises
    ------
    DiagnosisError
        If no solution is found in ``MOST_ROUNDS`` rounds.

    Notes
    -----
    Block principal pivoting with a finite backup rule: Portugal, Judice and Vicente 1994,
    Math. Comput. 63, 625-643 (from memory).
    """
    free = np.ones(len(right), bool) if start is None else start.copy()
    fewest, patience = len(right) + 1, FULL_EXCHANGES
    pull = TOLERANCE * max(float(np.abs(right).max(initial=0.0)), 1e-300)
    for _ in range(MOST_ROUNDS):
        x = np.zeros(len(right))
        if free.any():
            part = csc_matrix(matrix[free][:, free])
            x[free] = splu(
                part,
                permc_spec="MMD_AT_PLUS_A",
                diag_pivot_thresh=0.0,
                options={"SymmetricMode": True},
            ).solve(right[free])
        slope = matrix @ x - right
        below = free & (x < -TOLERANCE * np.abs(x).max(initial=0.0))
        wrong = below | (~free & (slope < -pull))
        count = int(np.count_nonzero(wrong))
        if count == 0:
            return np.maximum(x, 0.0)
        if count < fewest:
            fewest, patience = count, FULL_EXCHANGES
        elif patience > 0:
            patience -= 1
        else:
            wrong[: np.flatnonzero(wrong)[-1]] = False
        free ^= wrong
    raise DiagnosisError(
        "no diffusivity that is nowhere negative was found",
        found=f"{count} cells still change sides after {MOST_ROUNDS} rounds",
        expected="a positive definite problem",
        remedy="check the mean gradients for values of very different size",
    )
