"""Transport tensors freed of the bias that relaxing the tracers brings.

Tracers of an ensemble are often relaxed to a target, ``dc'/dt = -u'.G - lambda c'``, so that
they settle. The eddy flux then weighs the past of the velocity by ``exp(-lambda s)``,

    K(lambda) = int_0^inf <u'(t) u'(t-s)^T> exp(-lambda s) ds,

which shortens the memory of the eddies and, as a rule, lowers K. For velocities whose memory
fades exponentially while they turn, ``<u'(t) u'(t-s)^T> = exp(-W s) C`` with C their
covariance, the integral is ``K(lambda) = (W + lambda)^-1 C`` and so

    K(0)^-1 = K(lambda)^-1 - lambda C^-1.

Nothing else need be known: not the memory, nor the rate of turning. Written with
``V = K^-1 C`` instead of ``W = C K^-1`` the result is the same, since ``V = C^-1 W C``; the
order of C and W does not matter. Isotropic eddies give the complex form
``S + i alpha = EKE/w`` with ``w = 1/T + lambda - i Omega``, of which lambda is taken away.

Sources: Taylor 1922, Proc. London Math. Soc. 20, 196-212, for the integral; Borgas, Flesch and
Sawford 1997, J. Fluid Mech. 332, 141-171, for turning eddies (both from memory); the relation
between K(lambda) and K(0) is derived above.

Limits. The memory a parcel of real water meets need not fade exponentially (mixing lengths
near those of the mean state, waves of many frequencies); the correction then tells the sign and
size of the bias, not its value. It presumes tracers much older than both the relaxation time and
the memory of the eddies, all relaxed alike. Errors of K grow with it, without bound as lambda
times the shortened memory nears 1.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

NEUTRAL = 1e-9
"""Share of the size of W below which the real part of an eigenvalue counts as zero."""


class RelaxationCorrection(NamedTuple):
    """Tensors without the bias of tracer relaxation.

    Attributes
    ----------
    tensor : ndarray, shape (..., 2, 2), m2 s-1
        NaN where no memory that fades explains the diagnosed tensor.
    possible : ndarray of bool, shape (...)
        Where there is one: both eigenvalues of ``W = C K^-1 - lambda`` have real parts that
        are not negative.
    amplification : ndarray, shape (...), 1
        Bound on the growth of small errors of the diagnosed tensor, in the Frobenius norm:
        ``|K(0) K^-1| |K^-1 K(0)|`` in the spectral norm; NaN where not possible.
    """

    tensor: FloatArray
    possible: BoolArray
    amplification: FloatArray


def without_relaxation(
    tensor: FloatArray, covariance: FloatArray, relaxation_time: float
) -> RelaxationCorrection:
    """Correct diagnosed transport tensors for the linear relaxation of their tracers.

    Parameters
    ----------
    tensor : ndarray, shape (..., 2, 2), m2 s-1
        Diagnosed with tracers that relax; NaN where unknown.
    covariance : ndarray, shape (..., 2, 2), m2 s-2
        Unbiased covariance of the eddy velocities, symmetric: half its trace is the eddy
        kinetic energy.
    relaxation_time : float, s
        ``1/lambda``, the time in which anomalies of all tracers decay.

    Returns
    -------
    RelaxationCorrection

    Raises
    ------
    ValueError
        If the relaxation time is not positive.

    Examples
    --------
    A spinning velocity of 0.1 m/s, memory 2e5 s, relaxed in 2e5 s:

    >>> import numpy as np
    >>> found = np.array([[941.176471, -235.294118], [235.294118, 941.176471]])
    >>> without_relaxation(found, 0.01 * np.eye(2), 2e5).tensor.round(2)
    array([[1600., -800.],
           [ 800., 1600.]])
    """
    if not relaxation_time > 0.0:
        raise ValueError(f"relaxation time of {relaxation_time} s")
    rate = 1.0 / relaxation_time
    variance = covariance[..., 0, 0] * covariance[..., 1, 1] - covariance[..., 0, 1] ** 2
    moving = (variance > 0.0) & (covariance[..., 0, 0] > 0.0)
    strength = tensor[..., 0, 0] * tensor[..., 1, 1] - tensor[..., 0, 1] * tensor[..., 1, 0]
    usable = moving & np.isfinite(tensor).all(axis=(-2, -1)) & (strength != 0.0)
    identity = np.eye(2)
    K = np.where(usable[..., None, None], tensor, identity)
    C = np.where(usable[..., None, None], covariance, identity)
    fading = C @ np.linalg.inv(K) - rate * identity
    trace = np.trace(fading, axis1=-2, axis2=-1)
    determinant = np.linalg.det(fading)
    size = np.linalg.norm(fading, axis=(-2, -1))
    # Both eigenvalues of a 2x2 matrix lie in the right half-plane.
    possible = usable & (trace >= -NEUTRAL * size) & (determinant > (NEUTRAL * size) ** 2)
    corrected = np.linalg.inv(np.where(possible[..., None, None], fading, identity)) @ C
    left, right = corrected @ np.linalg.inv(K), np.linalg.inv(K) @ corrected
    growth = np.linalg.norm(left, 2, axis=(-2, -1)) * np.linalg.norm(right, 2, axis=(-2, -1))
    return RelaxationCorrection(
        tensor=np.where(possible[..., None, None], corrected, np.nan),
        possible=possible,
        amplification=np.where(possible, growth, np.nan),
    )
