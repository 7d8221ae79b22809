"""The error budget of a transport tensor: sampling, smoothing, noisy gradients, misfit.

All parts but the sampling error follow from the fit being linear in the fluxes where no
floor holds: an error of the right-hand side is sent through the same system.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.estimate import Estimator, GroupEstimate
from learnclosure.diagnosis.tensor import (
    LARGEST_CONDITION_NUMBER,
    NormalEquations,
    condition_number,
    down_gradient,
)

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

SMOOTHING_FACTORS = (0.5, 1.0, 2.0)
"""Smoothing lengths over the chosen one at which tracers left out are scored."""


@dataclass(frozen=True)
class ErrorBudget:
    """Errors of each component, shape (layer, y, x, 2, 2) in m2 s-1 each.

    Attributes
    ----------
    smoothing : ndarray
        What the smoothness term takes from a tensor such as the one found: the tensor's
        own fluxes fitted again, minus the tensor (twicing: Tukey 1977, Exploratory Data
        Analysis, chapter 16; from memory).
    misfit : ndarray
        Standard error if the fluxes the tensor does not explain were noise, independent
        from tracer to tracer; grows with the condition number.
    attenuation : ndarray or None
        What noise in the mean gradients takes from the tensor, from the departures
        between halves of the members (errors in variables: Fuller 1987, Measurement Error
        Models, chapter 2); None without halves.
    noise_share : ndarray or None, shape (layer, y, x), 1
        Share of the mean gradients' variance that is sampling noise.
    """

    smoothing: FloatArray
    misfit: FloatArray
    attenuation: FloatArray | None
    noise_share: FloatArray | None


def error_budget(
    estimator: Estimator, whole: GroupEstimate, halves: tuple[GroupEstimate, ...]
) -> ErrorBudget:
    """Estimate how far the tensor may be off, and why.

    Parameters
    ----------
    estimator : Estimator
    whole : GroupEstimate
    halves : tuple of GroupEstimate
        Two, or none.

    Returns
    -------
    ErrorBudget
    """
    tensor, equations = whole.smooth.tensor, whole.equations
    again = estimator.inversion.fit(
        NormalEquations(equations.M, tensor @ equations.M, equations.weights), floor=False
    )
    attenuation = noise_share = None
    if halves:
        noise = _gradient_noise(estimator, whole, halves)
        # The fit of K M to M gives K; of K (M - N) to M it gives K less what is lost.
        lost = estimator.inversion.fit(
            NormalEquations(equations.M, tensor @ noise, equations.weights), floor=False
        )
        attenuation = -lost.tensor
        total = np.trace(equations.M, axis1=-2, axis2=-1)
        share = np.trace(noise, axis1=-2, axis2=-1) / np.where(total > 0.0, total, 1.0)
        noise_share = np.minimum(share, 1.0)
    return ErrorBudget(
        smoothing=again.tensor - tensor,
        misfit=_misfit_error(estimator, whole),
        attenuation=attenuation,
        noise_share=noise_share,
    )


def _gradient_noise(
    estimator: Estimator, whole: GroupEstimate, halves: tuple[GroupEstimate, ...]
) -> FloatArray:
    """Second moment of the noise in the whole ensemble's gradients, shaped like M.

    Each half of the members has twice the noise variance of the whole; their difference
    has four times.
    """
    noise = np.zeros_like(whole.equations.M)
    for number, name in enumerate(estimator.tracers):
        apart = 0.5 * (halves[0].acted_on[name] - halves[1].acted_on[name])
        weight = whole.equations.weights[number][:, None, None, None, None]
        noise += weight * np.einsum("alyx,blyx->lyxab", apart, apart)
    return noise


def _misfit_error(estimator: Estimator, whole: GroupEstimate) -> FloatArray:
    tracers = estimator.tracers
    slopes = np.stack([whole.acted_on[name] for name in tracers])
    missed = np.stack([whole.flux[name] for name in tracers]) - down_gradient(
        whole.smooth.tensor, slopes
    )
    weights = whole.equations.weights[:, None, :, None, None]
    variance = (weights * missed**2).sum(axis=0) / max(len(tracers) - 2, 1)
    M = whole.equations.M
    determined = condition_number(M) <= LARGEST_CONDITION_NUMBER
    determinant = M[..., 0, 0] * M[..., 1, 1] - M[..., 0, 1] ** 2
    safe = np.where(determined, determinant, 1.0)
    spread = np.stack([M[..., 1, 1] / safe, M[..., 0, 0] / safe], axis=-1)
    error = np.sqrt(np.moveaxis(variance, 0, -1)[..., :, None] * spread[..., None, :])
    return np.asarray(np.where(determined[..., None, None], error, np.nan))


def jackknife_calibration(
    halves: tuple[GroupEstimate, ...], error: FloatArray, weights: FloatArray
) -> FloatArray:
    """Compare what halves of the members differ by with what the jackknife says.

    Parameters
    ----------
    halves : tuple of GroupEstimate
        The two halves.
    error : ndarray, shape (layer, y, x, 2, 2), m2 s-1
        Jackknife standard error of the whole ensemble's tensor.
    weights : ndarray, shape (layer, y, x)
        Zero where nothing is known.

    Returns
    -------
    ndarray, shape (layer, 2, 2)
        Standard deviation of the halves' difference over twice the error, since each half
        has twice the variance of the whole; 1 where the jackknife is right.
    """
    apart = halves[0].smooth.tensor - halves[1].smooth.tensor
    known = (weights > 0.0)[..., None, None] & (error > 0.0)
    ratio = np.where(known, apart / np.where(known, 2.0 * error, 1.0), 0.0)
    weight = np.where(known, weights[..., None, None], 0.0)
    total = weight.sum(axis=(1, 2))
    mean = (weight * ratio**2).sum(axis=(1, 2)) / np.where(total > 0.0, total, 1.0)
    return np.asarray(np.where(total > 0.0, np.sqrt(mean), np.nan))


def smoothing_check(
    estimator: Estimator, whole: GroupEstimate, withheld: tuple[str, ...], valid: BoolArray
) -> FloatArray:
    """Score fluxes of withheld tracers at shorter and longer smoothing lengths.

    Parameters
    ----------
    estimator : Estimator
    whole : GroupEstimate
    withheld : tuple of str
    valid : ndarray of bool, shape (layer, y, x)

    Returns
    -------
    ndarray, shape (length, layer)
        Mean coefficient of determination over the withheld tracers at each of
        ``SMOOTHING_FACTORS`` times the chosen length. The length is not chosen by it:
        withheld tracers stay untouched.
    """
    length = estimator.inversion.settings.smoothing_length
    rows = []
    for factor in SMOOTHING_FACTORS:
        tensor = whole.smooth.tensor
        if factor != 1.0:
            tensor = estimator.inversion.fit(whole.equations, length=factor * length).tensor
        rows.append(
            np.mean([estimator.score(tensor, whole, name, valid)[0] for name in withheld], axis=0)
        )
    return np.stack(rows)
