"""Transport tensors in depth axes, 3x3, where the upward velocity is known.

Vertical gradients of mean tracers are a thousand times steeper than horizontal ones and
vertical eddy fluxes a thousand times weaker. All sums are therefore taken in coordinates
whose vertical is stretched by a factor ``s`` of each layer, the ratio of the two kinds of
gradients: ``g* = (g_x, g_y, g_z/s)``, ``J* = (J_x, J_y, s J_z)`` and so ``K* = D K D`` with
``D = diag(1, 1, s)``, which keeps symmetric and antisymmetric parts apart and signs of
eigenvalues as they are.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy.sparse import csr_matrix

from learnclosure.diagnosis.systems import DirectSystem, smoothness_operator
from learnclosure.diagnosis.tensor import LARGEST_CONDITION_NUMBER
from learnclosure.ensemble.grid import Geometry

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

AXES = "xyz"


class NormalEquations3D(NamedTuple):
    """Weighted sums over tracers that determine ``K* M = B`` in every cell.

    Attributes
    ----------
    M : ndarray, shape (layer, y, x, 3, 3)
        ``sum w g* g*^T`` of stretched mean gradients.
    B : ndarray, shape (layer, y, x, 3, 3), m2 s-1
        ``-sum w J* g*^T`` of stretched eddy fluxes.
    stretching : ndarray, shape (layer,)
        The factor s.
    """

    M: FloatArray
    B: FloatArray
    stretching: FloatArray


def vertical_gradient(field: FloatArray, thickness: FloatArray, mask: BoolArray) -> FloatArray:
    """Upward derivative at the centres of levels, exact for parabolas inside the column.

    Parameters
    ----------
    field : ndarray, shape (..., layer, y, x)
        The top layer first; what stands on land is ignored.
    thickness : ndarray, shape (layer, y, x), m
    mask : ndarray of bool, shape (layer, y, x)

    Returns
    -------
    ndarray, shape (..., layer, y, x)
        Units of the field per metre; one-sided in the top and the bottom cell, zero on land
        and in columns of one cell.

    Examples
    --------
    >>> import numpy as np
    >>> thickness = np.array([10.0, 20.0, 40.0])[:, None, None]
    >>> centre = np.array([-5.0, -20.0, -50.0])[:, None, None]
    >>> vertical_gradient(2.0 * centre, thickness, thickness > 0.0).ravel()
    array([2., 2., 2.])
    """
    values = np.where(mask, field, 0.0)
    gap = 0.5 * (thickness[:-1] + thickness[1:])
    both = mask[:-1] & mask[1:]
    slope = np.where(
        both, (values[..., :-1, :, :] - values[..., 1:, :, :]) / np.where(both, gap, 1.0), 0.0
    )
    nothing = np.zeros_like(values[..., :1, :, :])
    above = np.concatenate([nothing, slope], axis=-3)
    below = np.concatenate([slope, nothing], axis=-3)
    open_gap = np.where(both, gap, 0.0)
    upper = np.concatenate([np.zeros_like(gap[:1]), open_gap])
    lower = np.concatenate([open_gap, np.zeros_like(gap[:1])])
    one_sided = (upper == 0.0) | (lower == 0.0)
    total = np.where(one_sided, 1.0, upper + lower)
    inside = (above * lower + below * upper) / total
    return np.asarray(np.where(one_sided, above + below, inside))


def normal_equations_3d(
    flux: FloatArray, gradient: FloatArray, area: FloatArray
) -> NormalEquations3D:
    """Sum the normal equations of ``J = -K grad C`` over tracers.

    Parameters
    ----------
    flux, gradient : ndarray, shape (tracer, 3, layer, y, x)
        Eddy fluxes and mean gradients of each tracer along x, y and upward.
    area : ndarray, shape (layer, y, x), m2
        Sea area of each cell.

    Returns
    -------
    NormalEquations3D

    Notes
    -----
    Plumb and Mahlman 1987, J. Atmos. Sci. 44, 298-327.
    """
    total = area.sum(axis=(-2, -1))
    square = (area * gradient**2).sum(axis=(-2, -1)) / np.where(total > 0.0, total, 1.0)
    along = square[:, 0] + square[:, 1]
    share = _inverse(along)
    steep = (share * square[:, 2]).sum(axis=0)
    flat = 0.5 * (share * along).sum(axis=0)
    usable = (steep > 0.0) & (flat > 0.0)
    stretching = np.sqrt(np.where(usable, steep / np.where(usable, flat, 1.0), 1.0))
    factor = np.ones((3, *stretching.shape))
    factor[2] = stretching
    spread = factor[:, :, None, None]
    stretched, carried = gradient / spread, flux * spread
    weights = _inverse(along + square[:, 2] / stretching**2)
    weighted = stretched * weights[:, None, :, None, None]
    M = np.einsum("kalyx,kblyx->lyxab", weighted, stretched)
    B = -np.einsum("kalyx,kblyx->lyxab", carried, weighted)
    return NormalEquations3D(M, B, stretching)


def _inverse(values: FloatArray) -> FloatArray:
    return np.asarray(np.where(values > 0.0, 1.0 / np.where(values > 0.0, values, 1.0), 0.0))


def condition_number_3d(equations: NormalEquations3D) -> FloatArray:
    """Condition number of the stretched gradients, ``sqrt(cond M)``.

    Parameters
    ----------
    equations : NormalEquations3D

    Returns
    -------
    ndarray, shape (layer, y, x)
        Infinite where fewer than three directions are known.
    """
    values = np.linalg.eigvalsh(equations.M)
    low, high = values[..., 0], values[..., -1]
    # Below this an eigenvalue is rounding error of the largest one.
    known = low > 16.0 * np.finfo(np.float64).eps * high
    return np.asarray(np.sqrt(np.where(known, high / np.where(known, low, 1.0), np.inf)))


def least_squares_tensor_3d(equations: NormalEquations3D) -> FloatArray:
    """Solve the normal equations in every cell by itself.

    Parameters
    ----------
    equations : NormalEquations3D

    Returns
    -------
    ndarray, shape (layer, y, x, 3, 3), m2 s-1
        NaN where the gradients do not determine a tensor.
    """
    determined = condition_number_3d(equations) <= LARGEST_CONDITION_NUMBER
    M = np.where(determined[..., None, None], equations.M, np.eye(3))
    # M is symmetric: K M = B turned over is M K^T = B^T.
    tensor = np.swapaxes(np.linalg.solve(M, np.swapaxes(equations.B, -1, -2)), -1, -2)
    return np.where(determined[..., None, None], _unstretched(tensor, equations.stretching), np.nan)


def smooth_tensor_3d(
    equations: NormalEquations3D, geometry: Geometry, area: FloatArray, smoothing_length: float
) -> FloatArray:
    """Fit tensors that vary smoothly along each level.

    In stretched coordinates, over the sea cells of each level,

        sum A tr[(K - B M^-1) M (K - B M^-1)^T] + l^2 m sum_faces (side/distance) |K_i - K_j|^2

    is least, with ``m = <tr M>/3``.

    Parameters
    ----------
    equations : NormalEquations3D
    geometry : Geometry
    area : ndarray, shape (layer, y, x), m2
    smoothing_length : float, m

    Returns
    -------
    ndarray, shape (layer, y, x, 3, 3), m2 s-1
        Zero on land.
    """
    tensor = np.zeros_like(equations.B)
    condition = condition_number_3d(equations)
    for layer in range(len(geometry.mask)):
        wet = np.flatnonzero(geometry.mask[layer])
        M = equations.M[layer].reshape(-1, 3, 3)[wet]
        weight = area[layer].ravel()[wet]
        trace = np.trace(M, axis1=-2, axis2=-1)
        if not trace.any():
            continue
        strength = smoothing_length**2 * float(np.sum(weight * trace) / np.sum(weight)) / 3.0
        smooth = strength * smoothness_operator(geometry, layer)[wet][:, wet]
        undetermined = condition[layer].ravel()[wet] > LARGEST_CONDITION_NUMBER
        system = DirectSystem(M, weight, csr_matrix(smooth), undetermined)
        found = system.solve(equations.B[layer].reshape(-1, 3, 3)[wet])
        tensor[layer].reshape(-1, 3, 3)[wet] = found
    return _unstretched(tensor, equations.stretching)


def _unstretched(tensor: FloatArray, stretching: FloatArray) -> FloatArray:
    factor = np.ones((len(stretching), 3))
    factor[:, 2] = stretching
    return np.asarray(tensor / (factor[:, :, None] * factor[:, None, :])[:, None, None])


def split_tensor(tensor: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Split tensors into symmetric part and the vector of the antisymmetric part.

    Parameters
    ----------
    tensor : ndarray, shape (..., 3, 3), m2 s-1

    Returns
    -------
    symmetric : ndarray, shape (..., 3, 3), m2 s-1
    vector : ndarray, shape (..., 3), m2 s-1
        The vector a of ``A g = a x g``; its upward component is the alpha of a 2x2 tensor
        and ``a = kappa (S_y, -S_x, 0)`` that of a skew flux with isoneutral slopes S.
    """
    symmetric = 0.5 * (tensor + np.swapaxes(tensor, -1, -2))
    half = 0.5 * (tensor - np.swapaxes(tensor, -1, -2))
    vector = np.stack([half[..., 2, 1], half[..., 0, 2], half[..., 1, 0]], axis=-1)
    return symmetric, vector


def joined_tensor(symmetric: FloatArray, vector: FloatArray) -> FloatArray:
    """Put together what :func:`split_tensor` takes apart.

    Parameters
    ----------
    symmetric : ndarray, shape (..., 3, 3), m2 s-1
    vector : ndarray, shape (..., 3), m2 s-1

    Returns
    -------
    ndarray, shape (..., 3, 3), m2 s-1
    """
    tensor = np.array(symmetric)
    for row, column, axis in ((2, 1, 0), (0, 2, 1), (1, 0, 2)):
        tensor[..., row, column] += vector[..., axis]
        tensor[..., column, row] -= vector[..., axis]
    return tensor


def without_growth(tensor: FloatArray, stretching: FloatArray) -> FloatArray:
    """Take negative eigenvalues of the symmetric part away; keep the antisymmetric part.

    Parameters
    ----------
    tensor : ndarray, shape (layer, y, x, 3, 3), m2 s-1
    stretching : ndarray, shape (layer,)
        Factor of each layer: the nearest tensor is sought in stretched coordinates, so that
        vertical components are not counted as nothing.

    Returns
    -------
    ndarray, shape (layer, y, x, 3, 3), m2 s-1
        The nearest in the Frobenius norm of stretched tensors (Higham 1988, Linear Algebra
        Appl. 103, 103-118); NaN where the tensor is.
    """
    symmetric, vector = split_tensor(tensor)
    known = np.isfinite(tensor).all(axis=(-2, -1), keepdims=True)
    stretched = _unstretched(np.where(known, symmetric, 0.0), 1.0 / stretching)
    values, vectors = np.linalg.eigh(stretched)
    kept = np.einsum("...ij,...j,...kj->...ik", vectors, np.maximum(values, 0.0), vectors)
    bounded = joined_tensor(_unstretched(kept, stretching), vector)
    return np.where(known, bounded, np.nan)


def down_gradient_3d(tensor: FloatArray, gradient: FloatArray) -> FloatArray:
    """Eddy fluxes ``J = -K grad C`` that tensors carry.

    Parameters
    ----------
    tensor : ndarray, shape (layer, y, x, 3, 3), m2 s-1
    gradient : ndarray, shape (tracer, 3, layer, y, x)

    Returns
    -------
    ndarray, shape (tracer, 3, layer, y, x)
        Zero where the tensor is not finite.
    """
    known = np.isfinite(tensor).all(axis=(-2, -1), keepdims=True)
    flux = np.einsum("lyxab,kblyx->kalyx", np.where(known, tensor, 0.0), gradient)
    return np.asarray(-flux)
