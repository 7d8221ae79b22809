"""How noise and reliability of covariances go with members: laws, prophecy and bootstrap.

Reliability is the share of the variance over a layer's cells that is not sampling noise.
The noise of covariances falls with the degrees of freedom, members less one; from halves
to ensembles of any size this is the general formula of Spearman 1910 and Brown 1910
(British Journal of Psychology 3).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import NamedTuple

import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
IndexArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class CeilingCurve:
    """Reliability of one quantity against the number of members or of snapshots.

    Attributes
    ----------
    counts : ndarray of int, shape (count,)
        Numbers of members or snapshots, growing.
    reliability, standard_error : ndarray, shape (count, layer), 1
        NaN in layers where nothing varies.
    measured : int
        How many of the counts were measured; the others are extrapolated from the last
        of them.
    offset : float
        Noise falls as ``1/(count - offset)``: 1 for members, 0 for snapshots.
    """

    counts: IndexArray
    reliability: FloatArray
    standard_error: FloatArray
    measured: int
    offset: float


class MembersNeeded(NamedTuple):
    """Members for a reliability, and the standard error, shape (layer,) each."""

    members: FloatArray
    standard_error: FloatArray


def subset_noise(members: int, chosen: int) -> tuple[float, float]:
    """Give the sampling noise of ``Moments.subset`` in units of that of one degree of freedom.

    Departures of N members from their mean are ``d = P u`` with the projection ``P``, and
    the products of a subset sum to ``u' P D P c`` with ``D`` choosing its members. For
    jointly normal independent members the covariance of two such forms is the trace of
    the product of their matrices.

    Parameters
    ----------
    members : int
        Number N of all members.
    chosen : int
        Number n of members in the subset.

    Returns
    -------
    shared : float
        Covariance of the noise of two disjoint subsets, ``1/(N-1)^2``.
    own : float
        Variance of the noise of one, ``(N^2 - 2N + n)/(n (N-1)^2)``; that of an ensemble
        with a mean of its own is ``1/(n-1)``.

    Examples
    --------
    >>> subset_noise(12, 12)[1] * 11
    1.0
    """
    square = (members - 1) ** 2
    return 1.0 / square, (members**2 - 2 * members + chosen) / (chosen * square)


def noise_ratio(correlation: FloatArray, shared: float, first: float, second: float) -> FloatArray:
    """Noise over signal variance from the correlation of two estimates of one field.

    The correlation is ``(1 + shared x)/sqrt((1 + first x)(1 + second x))`` with x the
    noise of one degree of freedom over the signal.

    Parameters
    ----------
    correlation : ndarray
    shared : float
        Covariance of their noise, in units of that of one degree of freedom.
    first, second : float
        Variance of the noise of each.

    Returns
    -------
    ndarray
        Infinite where the estimates agree no more than their noise alone does.

    Examples
    --------
    Two independent halves of one degree of freedom each, half of whose variance is noise:

    >>> import numpy as np
    >>> float(noise_ratio(np.array(0.5), 0.0, 1.0, 1.0))
    1.0
    """
    r2 = np.square(np.maximum(correlation, 0.0))
    square = r2 * first * second - shared**2
    linear = r2 * (first + second) - 2.0 * shared
    constant = r2 - 1.0
    solvable = square > 1e-12 * first * second
    safe = np.where(solvable, square, 1.0)
    root = np.sqrt(np.maximum(linear**2 - 4.0 * safe * constant, 0.0))
    ratio = np.where(solvable, (root - linear) / (2.0 * safe), np.inf)
    return np.asarray(np.where(np.isnan(correlation), np.nan, ratio))


def members_needed(curve: CeilingCurve, reliability: float) -> MembersNeeded:
    """Members (or snapshots) a reliability takes.

    Parameters
    ----------
    curve : CeilingCurve
        The last measured point of it is used.
    reliability : float
        Above 0 and below 1.

    Returns
    -------
    MembersNeeded
        Infinite where there is no signal to be seen.
    """
    last = curve.measured - 1
    here, error = curve.reliability[last], curve.standard_error[last]
    freedom = curve.counts[last] - curve.offset
    known = here > 0.0
    safe = np.where(known, here, 1.0)
    scale = freedom * reliability / (1.0 - reliability)
    needed = np.where(known, curve.offset + scale * (1.0 / safe - 1.0), np.inf)
    spread = np.where(known, scale * error / safe**2, np.inf)
    nothing = np.isnan(here)
    return MembersNeeded(np.where(nothing, np.nan, needed), np.where(nothing, np.nan, spread))


def reliability_with(ratio: FloatArray, freedom: float) -> FloatArray:
    """Reliability ``1/(1 + x/freedom)`` of an average, with x as of ``noise_ratio``."""
    return np.asarray(1.0 / (1.0 + ratio / freedom))


def layer_mean(values: FloatArray, axis: int = 0) -> FloatArray:
    """Mean over parts that vary; NaN where none does."""
    known = np.isfinite(values)
    count = known.sum(axis=axis)
    total = np.where(known, values, 0.0).sum(axis=axis)
    return np.where(count > 0, total / np.maximum(count, 1), np.nan)


def _products(values: FloatArray, weights: FloatArray) -> FloatArray:
    """Covariances over cells of every two members' fields, shape (layer, member, member)."""
    weights = np.where(np.isfinite(values).all(axis=0), weights, 0.0)
    share = weights / np.maximum(weights.sum(axis=(-2, -1), keepdims=True), 1e-300)
    departure = np.where(share > 0.0, values, 0.0)
    departure -= (share * departure).sum(axis=(-2, -1), keepdims=True)
    scaled = np.moveaxis(np.sqrt(share) * departure, 1, 0)
    flat = scaled.reshape(*scaled.shape[:2], -1)
    return np.asarray(flat @ flat.swapaxes(-2, -1))


class NoiseReplicates:
    """Bootstrap replicates of the noise ratio of one quantity, from pseudo-values.

    The pseudo-values ``N K - (N-1) K_without_i`` of covariances are linear in what each
    member contributes; the products between them have the expectations, signal and noise,
    of a one-way analysis of variance.

    Parameters
    ----------
    whole : ndarray, shape (part, layer, y, x)
        Estimate from all members; parts are averaged.
    left_out : sequence of ndarray, shape (part, layer, y, x)
        Estimates without each member in turn.
    weights : ndarray, shape (layer, y, x)
    choices : ndarray, shape (replicate, member)
        How often each replicate draws each member.
    """

    def __init__(
        self,
        whole: FloatArray,
        left_out: Sequence[FloatArray],
        weights: FloatArray,
        choices: FloatArray,
    ) -> None:
        count = len(left_out)
        # One part after another, so that no more than that is in memory twice.
        gram = np.stack(
            [
                _products(count * part - (count - 1) * np.stack(without), weights)
                for part, *without in zip(whole, *left_out, strict=True)
            ]
        )
        # Expected share of noise in the products of one and of two different pseudo-values.
        other = -1.0 / ((count - 1) * (count - 2))
        own = ((count - 1) ** 2 - 2.0 + 1.0 / (count - 1)) / (count - 2) ** 2
        total, square = choices.sum(axis=1), (choices**2).sum(axis=1)
        diagonal = np.diagonal(gram, axis1=-2, axis2=-1)
        alike = np.einsum("pli,bi->bpl", diagonal, choices) / total[:, None, None]
        twice = np.einsum("pli,bi->bpl", diagonal, choices**2)
        both = np.einsum("plij,bi,bj->bpl", gram, choices, choices, optimize=True) - twice
        # A member drawn twice must not be compared with itself.
        different = both / (total**2 - square)[:, None, None]
        noise = (alike - different) / (own - other)
        signal = different - other * noise
        seen = signal > 0.0
        ratio = np.where(seen, noise / np.where(seen, signal, 1.0), np.inf)
        self.ratio = np.where(noise > 0.0, ratio, np.where(diagonal.any(-1), 0.0, np.nan))

    def standard_error(self, freedom: float) -> FloatArray:
        """Spread of the reliability, shape (layer,), of an ensemble of some freedom."""
        replicates = layer_mean(reliability_with(self.ratio, freedom), axis=1)
        return np.asarray(replicates.std(axis=0, ddof=1))
