"""What the data at hand promise: tracers that differ, times that count, members that suffice."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import combinations

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.estimate import Estimator
from learnclosure.diagnosis.moments import Moments
from learnclosure.diagnosis.probe import Probe
from learnclosure.diagnosis.sampling import jackknife_standard_error
from learnclosure.diagnosis.tensor import LARGEST_CONDITION_NUMBER, condition_number

FloatArray = npt.NDArray[np.float64]

FORGOTTEN = 0.05
"""Correlation below which two times are taken for independent."""


@dataclass(frozen=True)
class Conditioning:
    """How well the mean tracer gradients determine a tensor, over the sea.

    Attributes
    ----------
    median, ninth_decile : float
        Of the condition number.
    undetermined : float
        Share of cells above the largest condition number.
    closest_pair : tuple of str
        The two tracers whose gradients are most nearly parallel.
    angle : float, degrees
        Median of the acute angle between the gradients of that pair.
    """

    median: float
    ninth_decile: float
    undetermined: float
    closest_pair: tuple[str, str]
    angle: float


@dataclass(frozen=True)
class SamplingCost:
    """What the times at hand are worth.

    Attributes
    ----------
    spacing : float, days
        Between snapshots, the median; NaN with one time.
    eddy_time, flux_time : float, days
        Time in which the correlation of the velocity, and of the products that make the
        flux, falls to 1/e; NaN where less than a third of the spacing or not known.
    times : int
        Number of snapshots.
    effective : float
        Number of independent ones that average as well; NaN with one time.
    accumulated : bool
        Whether fluxes accumulated between snapshots are read.
    """

    spacing: float
    eddy_time: float
    flux_time: float
    times: int
    effective: float
    accumulated: bool


@dataclass(frozen=True)
class ErrorProspect:
    """Sampling error of the tensor to be expected.

    Attributes
    ----------
    error : float
        Relative error of the trace with all members and times: root mean square over the
        sea of the standard error over that of the trace; NaN if it cannot be told.
    target : float
    members_needed : float
        Members for the target with the times at hand; NaN if it cannot be told.
    """

    error: float
    target: float
    members_needed: float


def conditioning(estimator: Estimator, moments: Moments) -> Conditioning:
    """Assess the mean tracer gradients.

    Parameters
    ----------
    estimator : Estimator
    moments : Moments

    Returns
    -------
    Conditioning
    """
    names = estimator.tracers
    means = {name: moments.whole.mean[name] for name in names}
    gradients = estimator.gradients(means)
    fluxes = {name: moments.whole.flux[name] for name in names}
    wet = estimator.geometry.mask
    number = condition_number(estimator.equations(fluxes, gradients).M)[wet]
    angles = {
        (one, other): float(np.median(_acute(gradients[one], gradients[other])[wet]))
        for one, other in combinations(names, 2)
    }
    pair = min(angles, key=lambda names: angles[names])
    # Infinite condition numbers are a value like others, which interpolation would spoil.
    ordered = np.sort(number)
    return Conditioning(
        median=float(ordered[len(ordered) // 2]),
        ninth_decile=float(ordered[(9 * len(ordered)) // 10]),
        undetermined=float(np.mean(number > LARGEST_CONDITION_NUMBER)),
        closest_pair=pair,
        angle=angles[pair],
    )


def _acute(first: FloatArray, second: FloatArray) -> FloatArray:
    """Angle between the lines two vectors lie on, degrees; 0 where one vanishes."""
    across = np.abs(first[0] * second[1] - first[1] * second[0])
    along = np.abs((first * second).sum(axis=0))
    return np.asarray(np.degrees(np.arctan2(across, along)))


def lag_correlation(departures: FloatArray) -> FloatArray:
    """Correlate departures from the ensemble mean with themselves at later times.

    Since the mean is that of other members, not of other times, no correlation is lost to
    a mean estimated from a short series.

    Parameters
    ----------
    departures : ndarray, shape (time, member, layer, ...)

    Returns
    -------
    ndarray, shape (time,)
        By lag, mean over the layers that vary; NaN if none does.
    """
    times = len(departures)
    series = np.moveaxis(departures, 2, 0).reshape(departures.shape[2], times, -1)
    result = np.empty((len(series), times))
    for lag in range(times):
        one, other = series[:, : times - lag], series[:, lag:]
        scale = np.sqrt((one**2).sum(axis=(1, 2)) * (other**2).sum(axis=(1, 2)))
        both = (one * other).sum(axis=(1, 2))
        result[:, lag] = np.where(scale > 0.0, both / np.where(scale > 0.0, scale, 1.0), np.nan)
    known = result[np.isfinite(result[:, 0])]
    return known.mean(axis=0) if len(known) else np.full(times, np.nan)


def effective_number(correlation: FloatArray, times: int) -> float:
    """Count the independent times whose average is as good.

    ``n / (1 + 2 sum_k (1 - k/n) r_k)`` (Bayley and Hammersley 1946, Supplement to the
    Journal of the Royal Statistical Society 8, 184-197).

    Parameters
    ----------
    correlation : ndarray, shape (lag,)
        By lag, one at lag 0. It ends where it falls below 0.05 for the first time; if it
        does not, it goes on falling by the same factor from lag to lag.
    times : int
        Number n of times.

    Returns
    -------
    float

    Examples
    --------
    >>> import numpy as np
    >>> round(effective_number(0.9 ** np.arange(12), 100), 4)
    5.8139
    """
    if not np.isfinite(correlation).all():
        return float("nan")
    below = np.flatnonzero(correlation < FORGOTTEN)
    lags = np.arange(times)
    r = np.zeros(times)
    if below.size:
        end = min(int(below[0]), times)
        r[:end] = correlation[:end]
    else:
        last = len(correlation) - 1
        if last == 0:
            return float("nan") if times > 1 else 1.0
        factor = correlation[last] ** (1.0 / last)
        r = np.where(
            lags <= last, correlation[np.minimum(lags, last)], factor ** lags.astype(np.float64)
        )
    return float(times / (1.0 + 2.0 * np.sum((1.0 - lags[1:] / times) * r[1:])))


def _folding_time(correlation: FloatArray, spacing: float) -> float:
    if len(correlation) < 2 or not correlation[1] > FORGOTTEN or correlation[1] >= 1.0:
        return float("nan")
    return float(-spacing / np.log(correlation[1]))


def flux_correlation(probe: Probe) -> tuple[FloatArray, FloatArray]:
    """Correlate velocities, and the products that make fluxes, over lags.

    The product of two series that decay alike forgets as fast as the product of their
    correlations says; for first-order autoregressive ones that is ``(r1 r2)^k``.

    Parameters
    ----------
    probe : Probe
        After its times have been read.

    Returns
    -------
    velocity, product : ndarray, shape (lag,)
    """
    velocity = np.mean(
        [lag_correlation(probe.departures(name)) for name in ("x_velocity", "y_velocity")], axis=0
    )
    tracer = np.mean([lag_correlation(probe.departures(name)) for name in probe.tracers], axis=0)
    return velocity, velocity * tracer


def sampling_cost(probe: Probe, times: FloatArray, accumulated: bool) -> SamplingCost:
    """Assess how many independent times the snapshots are worth.

    Parameters
    ----------
    probe : Probe
        After its times have been read.
    times : ndarray, shape (time,), days
        All times.
    accumulated : bool
        Whether fluxes accumulated between snapshots are read.

    Returns
    -------
    SamplingCost
    """
    velocity, product = flux_correlation(probe)
    spacing = float(np.median(np.diff(times))) if len(times) > 1 else float("nan")
    return SamplingCost(
        spacing=spacing,
        eddy_time=_folding_time(velocity, spacing),
        flux_time=_folding_time(product, spacing),
        times=len(times),
        effective=effective_number(product, len(times)) if len(times) > 1 else float("nan"),
        accumulated=accumulated,
    )


def error_prospect(
    estimator: Estimator,
    moments: Moments,
    probe: Probe,
    *,
    members: int,
    times: int,
    target: float,
) -> ErrorProspect:
    """Predict the relative error of the tensor's trace, and the members for a target.

    The jackknife error of the few times is carried over to all times and members: its
    variance falls with independent times and with members less one.

    Parameters
    ----------
    estimator : Estimator
    moments : Moments
        Of the probe.
    probe : Probe
    members, times : int
        Of the whole ensemble.
    target : float
        Relative error wanted.

    Returns
    -------
    ErrorProspect
    """
    unknown = ErrorProspect(float("nan"), target, float("nan"))
    left_out = estimator.left_out(moments)
    if left_out is None:
        return unknown
    _, product = flux_correlation(probe)
    few = effective_number(product, len(probe.times))
    many = effective_number(product, times)
    whole = estimator.group(moments.whole)
    weight = np.where(estimator.determined(whole.equations), estimator.area, 0.0)
    error = jackknife_standard_error(np.trace(left_out, axis1=-2, axis2=-1))
    trace = np.trace(whole.smooth.tensor, axis1=-2, axis2=-1)
    variance = float((weight * error**2).sum())
    # The noise of the few times is in their trace as well.
    signal = float((weight * trace**2).sum()) - variance
    if not (signal > 0.0 and np.isfinite(few) and np.isfinite(many)):
        return unknown
    used = len(probe.member_labels)
    relative = variance / signal * (few / many) * (used - 1)
    return ErrorProspect(
        error=float(np.sqrt(relative / (members - 1))),
        target=target,
        members_needed=float(1.0 + relative / target**2),
    )
