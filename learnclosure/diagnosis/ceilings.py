"""Ceilings as curves: how reliable fluxes and tensors are with more members or times.

Reliability is the share of the variance over a layer's cells that is not sampling noise.
Random disjoint halves of sub-ensembles are diagnosed on their own and compared; what they
say of noise is turned into the reliability of ensembles of any size by the general
formula of Spearman 1910 and Brown 1910 (British Journal of Psychology 3), in which the
noise of covariances falls with the degrees of freedom, members less one.

Error bars are from a bootstrap over members (Efron 1979, Annals of Statistics 7, 1-26) of
the jackknife pseudo-values (Tukey 1958, Annals of Mathematical Statistics 29, 614), which
stand for what each member contributes and cost no further inversion; the scatter between
draws is added.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.estimate import Estimator, GroupEstimate
from learnclosure.diagnosis.moments import GroupMoments, Moments
from learnclosure.diagnosis.reliability import (
    CeilingCurve,
    NoiseReplicates,
    layer_mean,
    noise_ratio,
    reliability_with,
    subset_noise,
)
from learnclosure.diagnosis.sampling import spearman_brown, weighted_correlation
from learnclosure.diagnosis.tensor import COMPONENTS, least_squares_tensor

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]
Fields = dict[str, FloatArray]
"""By quantity, fields of shape (part, layer, y, x) whose reliabilities are averaged."""

LEAST_MEMBERS = 4
MOST_TIMES_MORE = 4
"""How many times more members or snapshots than there are the curves are drawn out to."""
REPLICATES = 200


@dataclass(frozen=True)
class Ceilings:
    """Curves by quantity.

    Attributes
    ----------
    members, snapshots : dict of str to CeilingCurve
        Of ``flux``, of each component of the smooth ``transport_tensor_xx`` and so on and
        of ``least_squares_tensor_xx`` and so on.
    """

    members: dict[str, CeilingCurve]
    snapshots: dict[str, CeilingCurve]


def member_counts(members: int) -> list[int]:
    """Sizes of sub-ensembles that are measured: 4, 6, 8, 12, 16, 24 and so on, and the whole.

    Parameters
    ----------
    members : int

    Returns
    -------
    list of int
        Even numbers.
    """
    counts = [size for size in _ladder(members) if size <= members]
    return sorted({*counts, members - members % 2}) if counts else []


def fits_needed(members: int, blocks: int, draws: int) -> int:
    """Count the smooth inversions that measuring ceilings takes.

    Parameters
    ----------
    members, blocks, draws : int
        Members, blocks of time, and pairs of halves for each size.

    Returns
    -------
    int
    """
    windows = sum(blocks // length for length in _window_lengths(blocks))
    return 2 * draws * len(member_counts(members)) + 2 * windows


def _window_lengths(blocks: int) -> list[int]:
    """Blocks in a window, all of them excepted: 1, 2, 4 and so on."""
    return [2**power for power in range(blocks.bit_length()) if 2**power < blocks]


def _ladder(members: int) -> list[int]:
    """Sizes in steps of about a half, up to a few times more than there are members."""
    counts = [LEAST_MEMBERS]
    while counts[-1] < MOST_TIMES_MORE * members:
        power = 2 ** (counts[-1].bit_length() - 1)
        counts.append(counts[-1] + power // 2)
    return [count for count in counts if count <= MOST_TIMES_MORE * members]


class _Measurer:
    """Measures reliability of one region from pairs of independent estimates."""

    def __init__(self, estimator: Estimator, weights: FloatArray, names: tuple[str, ...]) -> None:
        self.estimator = estimator
        self.weights = weights
        self.names = names

    def of_tensors(self, flux: Fields, smooth: FloatArray, plain: FloatArray) -> Fields:
        """Gather the quantities whose reliability is asked for."""
        fields = {"flux": np.concatenate([flux[name] for name in self.names])}
        for stem, tensor in (("transport_tensor", smooth), ("least_squares_tensor", plain)):
            for a, b, pair in COMPONENTS:
                fields[f"{stem}_{pair}"] = tensor[None, ..., a, b]
        return {name: np.where(self.weights > 0.0, part, 0.0) for name, part in fields.items()}

    def of_moments(self, mean: Fields, flux: Fields) -> Fields:
        """Diagnose means and fluxes of some members or times."""
        used = {name: mean[name] for name in self.names}
        acted_on = self.estimator.acted_on(self.estimator.gradients(used))
        equations = self.estimator.equations(flux, acted_on)
        smooth = self.estimator.inversion.fit(equations).tensor
        return self.of_tensors(flux, smooth, least_squares_tensor(equations))

    def of_group(self, group: GroupEstimate) -> Fields:
        """Gather the quantities of a group diagnosed already."""
        return self.of_tensors(group.flux, group.smooth.tensor, group.least_squares)

    def correlations(self, first: Fields, second: Fields) -> Fields:
        """Correlate two estimates where both are determined, shape (part, layer) each."""
        return {
            name: weighted_correlation(
                one, other, np.where(np.isfinite(one + other), self.weights, 0.0)
            )
            for (name, one), other in zip(first.items(), second.values(), strict=True)
        }


def _point(
    correlations: FloatArray, noise: tuple[float, float, float], freedom: float
) -> tuple[FloatArray, FloatArray]:
    """Reliability and its error by the scatter between draws (draw, part, layer)."""
    middle = correlations.mean(axis=0)
    draws = len(correlations)
    scatter = correlations.std(axis=0, ddof=1) / np.sqrt(draws) if draws > 1 else 0.0 * middle
    low, here, high = (
        layer_mean(reliability_with(noise_ratio(np.minimum(value, 1.0), *noise), freedom))
        for value in (middle - scatter, middle, middle + scatter)
    )
    return here, 0.5 * (high - low)


def _curve(
    points: Sequence[tuple[int, FloatArray, tuple[float, float, float]]],
    further: Sequence[int],
    replicates: NoiseReplicates,
    offset: float,
    factor: float,
) -> CeilingCurve:
    """Join measured points and the prophecy from the last of them.

    A point is a count, correlations (draw, part, layer) and their noise; an average over a
    count has ``factor (count - offset)`` degrees of freedom.
    """
    values, errors = [], []
    here, scatter, last = np.empty(0), np.empty(0), 1.0
    for count, correlations, noise in points:
        last = factor * (count - offset)
        here, scatter = _point(correlations, noise, last)
        values.append(here)
        errors.append(np.hypot(scatter, replicates.standard_error(last)))
    for count in further:
        freedom = factor * (count - offset)
        values.append(spearman_brown(here, freedom / last))
        errors.append(np.hypot(scatter, replicates.standard_error(freedom)))
    counts = np.asarray([*(count for count, *_ in points), *further], dtype=np.int64)
    value = np.stack(values)
    error = np.where(np.isnan(value), np.nan, np.stack(errors))
    return CeilingCurve(counts, value, error, len(points), offset)


def _window(blocks: Sequence[GroupMoments], times: Sequence[int]) -> tuple[Fields, Fields]:
    """Mean state and fluxes over consecutive blocks of time."""
    share = np.asarray(times, dtype=np.float64) / sum(times)

    def over(parts: Sequence[Fields]) -> Fields:
        names = parts[0]
        return {
            name: np.asarray(sum(w * part[name] for w, part in zip(share, parts, strict=True)))
            for name in names
        }

    return over([block.mean for block in blocks]), over([block.flux for block in blocks])


def _member_points(
    measurer: _Measurer, moments: Moments, draws: int, seed: int
) -> dict[int, list[Fields]]:
    """Correlate random disjoint halves of sub-ensembles, several draws of each size."""
    random = np.random.default_rng(seed)
    members = len(next(iter(moments.member_product.values())))
    found: dict[int, list[Fields]] = {}
    for size in member_counts(members):
        for _ in range(draws):
            chosen = random.permutation(members)[:size]
            halves = [
                measurer.of_moments(*moments.subset(np.sort(half)))
                for half in (chosen[: size // 2], chosen[size // 2 :])
            ]
            found.setdefault(size, []).append(measurer.correlations(*halves))
    return found


def _snapshot_points(
    measurer: _Measurer, moments: Moments, halves: tuple[GroupEstimate, ...]
) -> dict[int, list[Fields]]:
    """Correlate the two halves of the members over windows of consecutive blocks of time.

    Windows of one length do not overlap. Blocks are consecutive, not every n-th time, so
    that times that resemble their neighbours are not counted as independent.
    """
    found: dict[int, list[Fields]] = {}
    blocks, times = moments.blocks, moments.block_times
    for length in _window_lengths(len(blocks)):
        for start in range(0, len(blocks) - length + 1, length):
            part = slice(start, start + length)
            pair = [
                measurer.of_moments(*_window([block[half] for block in blocks[part]], times[part]))
                for half in (0, 1)
            ]
            found.setdefault(sum(times[:length]), []).append(measurer.correlations(*pair))
    whole = measurer.correlations(*(measurer.of_group(half) for half in halves))
    found[sum(times)] = [whole]
    return found


def estimate_ceilings(
    moments: Moments,
    estimator: Estimator,
    whole: GroupEstimate,
    halves: tuple[GroupEstimate, ...],
    left_out: FloatArray,
    valid: BoolArray,
    tracers: tuple[str, ...],
    *,
    members: int,
    draws: int,
    seed: int = 0,
) -> Ceilings:
    """Measure reliability against members and snapshots.

    Parameters
    ----------
    moments : Moments
        Of at least four members.
    estimator : Estimator
    whole : GroupEstimate
        Of all members.
    halves : tuple of GroupEstimate
        Of two halves of the members.
    left_out : ndarray, shape (group, layer, y, x, 2, 2), m2 s-1
        Smooth tensors without each member, or each group of members, in turn.
    valid : ndarray of bool, shape (layer, y, x)
        Cells that count.
    tracers : tuple of str
        Those whose fluxes count.
    members : int
        Members of the ensemble. Where these are more than the groups, sub-ensembles are made
        of whole groups and counted in members.
    draws : int
        Random pairs of halves for each size of sub-ensemble.
    seed : int, optional

    Returns
    -------
    Ceilings
    """
    weights = np.where(valid, estimator.area, 0.0)
    measurer = _Measurer(estimator, weights, tracers)
    replicates = _replicates(measurer, moments, measurer.of_group(whole), left_out, seed)
    each = members / len(left_out)
    members, times = len(left_out), sum(moments.block_times)
    by_size = _member_points(measurer, moments, draws, seed)
    by_time = _snapshot_points(measurer, moments, halves)
    more = [size for size in _ladder(members) if size > max(by_size)]
    longer = [times * 2**power for power in range(1, MOST_TIMES_MORE.bit_length())]
    own = [1.0 / (len(range(start, members, 2)) - 1) for start in (0, 1)]
    of_members, of_snapshots = {}, {}
    for name, noise in replicates.items():
        points = []
        for size, drawn in by_size.items():
            shared, variance = subset_noise(members, size // 2)
            points.append((size, _stack(drawn, name), (shared, variance, variance)))
        curve = _curve(points, more, noise, 1.0, 1.0)
        counts = np.round(each * curve.counts).astype(np.int64)
        of_members[name] = replace(curve, counts=counts)
        # Noise in units of that of one degree of freedom over all times.
        points = [
            (count, _stack(drawn, name), (0.0, own[0] * times / count, own[1] * times / count))
            for count, drawn in by_time.items()
        ]
        of_snapshots[name] = _curve(points, longer, noise, 0.0, (members - 1.0) / times)
    return Ceilings(of_members, of_snapshots)


def _stack(drawn: Sequence[Fields], name: str) -> FloatArray:
    return np.stack([draw[name] for draw in drawn])


def _replicates(
    measurer: _Measurer, moments: Moments, whole: Fields, left_out: FloatArray, seed: int
) -> dict[str, NoiseReplicates]:
    """Bootstrap members: how often each is drawn, applied to the pseudo-values."""
    members = len(left_out)
    random = np.random.default_rng([seed, 1])
    choices = random.multinomial(members, np.full(members, 1.0 / members), REPLICATES)
    # A replicate of one member only says nothing of the difference between members.
    kept = choices[(choices > 0).sum(axis=1) > 1].astype(np.float64)
    without: dict[str, list[FloatArray]] = {}
    for member in range(members):
        mean, flux = moments.without_member(member)
        used = {name: mean[name] for name in measurer.names}
        acted_on = measurer.estimator.acted_on(measurer.estimator.gradients(used))
        equations = measurer.estimator.equations(flux, acted_on)
        fields = measurer.of_tensors(flux, left_out[member], least_squares_tensor(equations))
        for name, values in fields.items():
            without.setdefault(name, []).append(values)
    return {
        name: NoiseReplicates(whole[name], values, measurer.weights, kept)
        for name, values in without.items()
    }
