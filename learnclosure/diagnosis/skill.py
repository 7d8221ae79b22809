"""How much of an eddy flux, or of its divergence, a prediction explains (NumPy only)."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]

LEAST_VARIATION = 1e-10
"""Fluxes whose standard deviation is a smaller share of their size vary by rounding only."""


def flux_skill(predicted: FloatArray, true: FloatArray, weights: FloatArray) -> FloatArray:
    """Coefficient of determination of eddy fluxes in each layer.

    Each tracer counts alike: its squared errors are divided by the variance of its own
    flux, both components together, about their weighted means.

    Parameters
    ----------
    predicted, true : ndarray, shape (tracer, component, layer, y, x)
        Fluxes; what stands where the weight is zero is ignored.
    weights : ndarray, shape (layer, y, x)
        Weight of each cell, usually its sea area.

    Returns
    -------
    ndarray, shape (layer,)
        1 for a perfect prediction, 0 for the mean; NaN for a layer without weight or
        whose fluxes vary by no more than rounding.

    Examples
    --------
    >>> import numpy as np
    >>> true = np.arange(8.0).reshape(1, 2, 1, 2, 2)
    >>> float(flux_skill(true, true, np.ones((1, 2, 2)))[0])
    1.0
    """
    counted = weights > 0.0
    weight = np.where(counted, weights, 0.0)
    truth, guess = np.where(counted, true, 0.0), np.where(counted, predicted, 0.0)
    total = weight.sum(axis=(-2, -1))
    with np.errstate(divide="ignore", invalid="ignore"):
        mean = (weight * truth).sum(axis=(-2, -1)) / total
        departure = truth - mean[..., None, None]
        error = (weight * (guess - truth) ** 2).sum(axis=(1, -2, -1))
        variance = (weight * departure**2).sum(axis=(1, -2, -1))
        size = (weight * truth**2).sum(axis=(1, -2, -1))
        skill = 1.0 - error / variance
    skill[~(variance > LEAST_VARIATION**2 * size)] = np.nan
    return np.asarray(skill.mean(axis=0))


def divergence_skill(predicted: FloatArray, true: FloatArray, weights: FloatArray) -> FloatArray:
    """Coefficient of determination of flux divergences in each layer.

    Parameters
    ----------
    predicted, true : ndarray, shape (tracer, layer, y, x)
        Divergences; what stands where the weight is zero is ignored.
    weights : ndarray, shape (layer, y, x)

    Returns
    -------
    ndarray, shape (layer,)
        As ``flux_skill``.
    """
    return flux_skill(predicted[:, None], true[:, None], weights)
