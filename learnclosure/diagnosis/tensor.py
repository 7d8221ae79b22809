"""Transport tensors cell by cell: normal equations, least squares, parts and quality."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

COMPONENTS = tuple(
    (a, b, f"{row}{column}") for a, row in enumerate("xy") for b, column in enumerate("xy")
)
"""Row and column of each component of a tensor, and its name (xx, xy, yx, yy)."""

LARGEST_CONDITION_NUMBER = 50.0
"""Cells whose mean tracer gradients are worse conditioned have no tensor of their own."""


class NormalEquations(NamedTuple):
    """Weighted sums over tracers that determine ``K M = B`` in every cell.

    Attributes
    ----------
    M : ndarray, shape (layer, y, x, 2, 2)
        ``sum w g g^T`` of the mean gradients g.
    B : ndarray, shape (layer, y, x, 2, 2), m2 s-1
        ``-sum w J g^T`` of the eddy fluxes J.
    weights : ndarray, shape (tracer, layer)
        ``1/<|g|^2>`` of each tracer over the layer, so that tracers count alike and M is
        a pure number.
    """

    M: FloatArray
    B: FloatArray
    weights: FloatArray


def normal_equations(flux: FloatArray, gradient: FloatArray, area: FloatArray) -> NormalEquations:
    """Sum the normal equations of ``J = -K grad C`` over tracers.

    Parameters
    ----------
    flux, gradient : ndarray, shape (tracer, 2, layer, y, x)
        Eddy fluxes and mean gradients of each tracer.
    area : ndarray, shape (layer, y, x), m2
        Sea area of each cell.

    Returns
    -------
    NormalEquations

    Notes
    -----
    Plumb and Mahlman 1987, J. Atmos. Sci. 44, 298-327.
    """
    square = (gradient**2).sum(axis=1)
    total = area.sum(axis=(-2, -1))
    mean_square = (area * square).sum(axis=(-2, -1)) / np.where(total > 0.0, total, 1.0)
    weights = np.where(mean_square > 0.0, 1.0 / np.where(mean_square > 0.0, mean_square, 1.0), 0.0)
    weighted = gradient * weights[:, None, :, None, None]
    M = np.einsum("kalyx,kblyx->lyxab", weighted, gradient)
    B = -np.einsum("kalyx,kblyx->lyxab", flux, weighted)
    return NormalEquations(M, B, weights)


def condition_number(M: FloatArray) -> FloatArray:
    """Condition number of the matrix of weighted gradients, ``sqrt(cond M)``.

    Parameters
    ----------
    M : ndarray, shape (..., 2, 2)

    Returns
    -------
    ndarray, shape (...)
        Infinite where the gradients are parallel or vanish. ``cot(angle/2)`` for two
        gradients of equal weight.
    """
    mean = 0.5 * (M[..., 0, 0] + M[..., 1, 1])
    radius = np.hypot(0.5 * (M[..., 0, 0] - M[..., 1, 1]), M[..., 0, 1])
    determinant = M[..., 0, 0] * M[..., 1, 1] - M[..., 0, 1] * M[..., 1, 0]
    high = mean + radius
    # The small eigenvalue from the determinant, which cancels less than mean - radius.
    low = np.where(high > 0.0, determinant / np.where(high > 0.0, high, 1.0), 0.0)
    return np.asarray(np.sqrt(np.where(low > 0.0, high / np.where(low > 0.0, low, 1.0), np.inf)))


def least_squares_tensor(equations: NormalEquations) -> FloatArray:
    """Solve the normal equations in every cell by itself, ``K = B M^-1``.

    Parameters
    ----------
    equations : NormalEquations

    Returns
    -------
    ndarray, shape (layer, y, x, 2, 2), m2 s-1
        NaN where the gradients do not determine a tensor.
    """
    M, B = equations.M, equations.B
    determinant = M[..., 0, 0] * M[..., 1, 1] - M[..., 0, 1] * M[..., 1, 0]
    determined = condition_number(M) <= LARGEST_CONDITION_NUMBER
    safe = np.where(determined, determinant, 1.0)
    adjugate = np.empty_like(M)
    adjugate[..., 0, 0], adjugate[..., 1, 1] = M[..., 1, 1], M[..., 0, 0]
    adjugate[..., 0, 1], adjugate[..., 1, 0] = -M[..., 0, 1], -M[..., 1, 0]
    tensor = B @ adjugate / safe[..., None, None]
    return np.where(determined[..., None, None], tensor, np.nan)


def scalar_diffusivity(equations: NormalEquations) -> FloatArray:
    """Scalar that fits the fluxes best, ``tr B / tr M``.

    Parameters
    ----------
    equations : NormalEquations

    Returns
    -------
    ndarray, shape (layer, y, x), m2 s-1
        Zero where there are no gradients.
    """
    trace_M = np.trace(equations.M, axis1=-2, axis2=-1)
    trace_B = np.trace(equations.B, axis1=-2, axis2=-1)
    return np.asarray(np.where(trace_M > 0.0, trace_B / np.where(trace_M > 0.0, trace_M, 1.0), 0.0))


def leverage(equations: NormalEquations, gradient: FloatArray, area: FloatArray) -> FloatArray:
    """Leverage ``w g^T M^-1 g`` of a tracer that took no part in the inversion.

    Parameters
    ----------
    equations : NormalEquations
    gradient : ndarray, shape (2, layer, y, x)
        Its mean gradient.
    area : ndarray, shape (layer, y, x), m2

    Returns
    -------
    ndarray, shape (layer, y, x), 1
        Above 1 the inversion knows less of this tracer's direction than of its own
        tracers; NaN where M is singular.
    """
    M = equations.M
    total = area.sum(axis=(-2, -1))
    square = (area * (gradient**2).sum(axis=0)).sum(axis=(-2, -1))
    weight = np.where(square > 0.0, total / np.where(square > 0.0, square, 1.0), 0.0)
    determinant = M[..., 0, 0] * M[..., 1, 1] - M[..., 0, 1] * M[..., 1, 0]
    determined = condition_number(M) <= LARGEST_CONDITION_NUMBER
    g_x, g_y = gradient
    form = (
        M[..., 1, 1] * g_x * g_x
        - (M[..., 0, 1] + M[..., 1, 0]) * g_x * g_y
        + M[..., 0, 0] * g_y * g_y
    )
    value = weight[:, None, None] * form / np.where(determined, determinant, 1.0)
    return np.where(determined, value, np.nan)


def symmetric_parts(tensor: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Split tensors into symmetric components and the antisymmetric scalar.

    Parameters
    ----------
    tensor : ndarray, shape (..., 2, 2), m2 s-1

    Returns
    -------
    S_xx, S_xy, S_yy, alpha : ndarray, shape (...), m2 s-1
        ``alpha = (K_yx - K_xy)/2``.
    """
    xy, yx = tensor[..., 0, 1], tensor[..., 1, 0]
    return tensor[..., 0, 0], 0.5 * (xy + yx), tensor[..., 1, 1], 0.5 * (yx - xy)


def with_floor(tensor: FloatArray, floor: float) -> FloatArray:
    """Raise the eigenvalues of the symmetric part to a floor; keep the antisymmetric part.

    Parameters
    ----------
    tensor : ndarray, shape (..., 2, 2), m2 s-1
    floor : float, m2 s-1

    Returns
    -------
    ndarray, shape (..., 2, 2), m2 s-1
        The nearest tensor in the Frobenius norm (Higham 1988, Linear Algebra Appl. 103,
        103-118).
    """
    xx, xy, yy, alpha = symmetric_parts(tensor)
    mean, difference = 0.5 * (xx + yy), 0.5 * (xx - yy)
    radius = np.hypot(difference, xy)
    high, low = np.maximum(mean + radius, floor), np.maximum(mean - radius, floor)
    shrink = np.where(radius > 0.0, 0.5 * (high - low) / np.where(radius > 0.0, radius, 1.0), 0.0)
    new_mean = 0.5 * (high + low)
    result = np.empty_like(tensor)
    result[..., 0, 0] = new_mean + shrink * difference
    result[..., 1, 1] = new_mean - shrink * difference
    result[..., 0, 1] = shrink * xy - alpha
    result[..., 1, 0] = shrink * xy + alpha
    return result


def down_gradient(tensor: FloatArray, gradient: FloatArray) -> FloatArray:
    """Eddy fluxes ``J = -K grad C`` that tensors carry.

    Parameters
    ----------
    tensor : ndarray, shape (layer, y, x, 2, 2), m2 s-1
    gradient : ndarray, shape (tracer, 2, layer, y, x)

    Returns
    -------
    ndarray, shape (tracer, 2, layer, y, x)
        Zero where the tensor is not finite.
    """
    known = np.isfinite(tensor).all(axis=(-2, -1), keepdims=True)
    flux = np.einsum("lyxab,kblyx->kalyx", np.where(known, tensor, 0.0), gradient)
    return np.asarray(-flux)
