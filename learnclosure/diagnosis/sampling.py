"""Sampling error of diagnosed quantities: member jackknife and split halves."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.skill import LEAST_VARIATION

FloatArray = npt.NDArray[np.float64]


def jackknife_standard_error(left_out: FloatArray) -> FloatArray:
    """Compute the standard error from estimates that leave one member out each.

    Parameters
    ----------
    left_out : ndarray, shape (member, ...)

    Returns
    -------
    ndarray, shape (...)
        ``sqrt((N-1)/N sum (x_i - mean)^2)`` (Efron and Stein 1981, Annals of Statistics
        9, 586-596).

    Examples
    --------
    >>> import numpy as np
    >>> sample = np.array([1.0, 2.0, 3.0, 4.0, 10.0])
    >>> means = np.array([np.delete(sample, i).mean() for i in range(5)])
    >>> round(float(jackknife_standard_error(means)), 7)
    1.5811388
    """
    count = len(left_out)
    departure = left_out - left_out.mean(axis=0)
    return np.asarray(np.sqrt((count - 1) / count * (departure**2).sum(axis=0)))


def weighted_correlation(first: FloatArray, second: FloatArray, weights: FloatArray) -> FloatArray:
    """Weighted correlation over the last two axes.

    Parameters
    ----------
    first, second, weights : ndarray, shape (..., y, x)
        What stands where the weight is zero is ignored.

    Returns
    -------
    ndarray, shape (...)
        NaN where either does not vary by more than rounding.
    """
    counted = weights > 0.0
    weight = np.where(counted, weights, 0.0)
    one, two = np.where(counted, first, 0.0), np.where(counted, second, 0.0)
    total = weight.sum(axis=(-2, -1), keepdims=True)
    sizes = [(weight * values**2).sum(axis=(-2, -1)) for values in (one, two)]
    with np.errstate(divide="ignore", invalid="ignore"):
        one = one - (weight * one).sum(axis=(-2, -1), keepdims=True) / total
        two = two - (weight * two).sum(axis=(-2, -1), keepdims=True) / total
        covariance = (weight * one * two).sum(axis=(-2, -1))
        variances = [(weight * values**2).sum(axis=(-2, -1)) for values in (one, two)]
        varies = np.logical_and(
            *(v > LEAST_VARIATION**2 * s for v, s in zip(variances, sizes, strict=True))
        )
        scale = np.sqrt(variances[0] * variances[1])
        return np.asarray(np.where(varies & (scale > 0.0), covariance / scale, np.nan))


def spearman_brown(correlation: FloatArray, length: float | FloatArray = 2.0) -> FloatArray:
    """Reliability of a whole from that of its parts, ``k r/(1 + (k - 1) r)``.

    Parameters
    ----------
    correlation : ndarray
        Correlation ``r`` of two independent parts.
    length : float or ndarray, optional
        How many times ``k`` more the whole averages than a part; two halves make a whole.

    Returns
    -------
    ndarray
        The share of variance that is not sampling noise, and so the highest coefficient
        of determination any prediction can reach; zero where halves do not agree at all
        (Spearman 1910 and Brown 1910, British Journal of Psychology 3).
    """
    positive = np.maximum(correlation, 0.0)
    return np.asarray(length * positive / (1.0 + (length - 1.0) * positive))
