"""Half-widths: the conformal order statistic, its coverage, and calibration by region."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from learnclosure.closures.intervals import calibrate_half_widths, conformal_order_statistic
from learnclosure.errors import TrainingError


@pytest.mark.parametrize(
    ("count", "rank"),
    # k = ceil((n + 1)(1 - a)) with a = 0.1 (Vovk, Gammerman and Shafer 2005).
    [(99, 90), (100, 91), (9, 9), (8, None)],
)
def test_order_statistic_has_the_rank_of_split_conformal(count: int, rank: int | None) -> None:
    scores = np.random.default_rng(0).permutation(np.arange(1.0, count + 1.0))
    expected = math.inf if rank is None else float(rank)
    assert conformal_order_statistic(scores, 0.1) == expected


@pytest.mark.parametrize(("count", "rank"), [(99, 90), (100, 91), (19, 18)])
def test_coverage_is_rank_over_count_plus_one(count: int, rank: int) -> None:
    # Exact for continuous scores: k / (n + 1); here by Monte Carlo within four errors.
    generator = np.random.default_rng(1)
    trials = 20_000
    hits = sum(
        generator.normal() <= conformal_order_statistic(generator.normal(size=count), 0.1)
        for _ in range(trials)
    )
    p = rank / (count + 1)
    assert abs(hits / trials - p) < 4.0 * math.sqrt(p * (1.0 - p) / trials)


@settings(derandomize=True, max_examples=100, deadline=None)
@given(
    st.lists(st.floats(0.0, 1e3), min_size=1, max_size=80),
    st.floats(0.01, 0.49),
)
def test_a_finite_order_statistic_covers_its_share(scores: list[float], a: float) -> None:
    values = np.array(scores)
    q = conformal_order_statistic(values, a)
    if math.isfinite(q):
        assert np.mean(values <= q) >= 1.0 - a - 1e-9
    else:
        assert len(values) < (1.0 - a) / a + 1e-6


def invented(regions: int, cells: int) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    generator = np.random.default_rng(5)
    predicted = np.abs(generator.normal(2000.0, 300.0, size=(regions * cells, 4)))
    size = np.repeat(generator.uniform(0.05, 0.4, regions), cells)
    scale = 0.5 * (predicted[:, 0] + predicted[:, 3]) + 50.0
    true = predicted + (size * scale)[:, None] * generator.normal(size=predicted.shape)
    region = np.repeat([f"region {number}" for number in range(regions)], cells)
    return predicted, true, region


def test_multipliers_are_the_largest_over_regions() -> None:
    predicted, true, region = invented(4, 300)
    half_widths = calibrate_half_widths(predicted, true, region, 0.1, 50.0)
    stacked = np.stack(list(half_widths.by_region.values()))
    np.testing.assert_array_equal(half_widths.multipliers, stacked.max(axis=0))
    assert stacked.shape == (4, 4)


def test_a_new_exchangeable_region_is_covered_as_promised() -> None:
    # With n exchangeable regions the new one has the largest order statistic with
    # probability 1 / (n + 1): by symmetry, no distribution assumed.
    generator = np.random.default_rng(8)
    regions, cells, trials = 3, 40, 400
    covered = 0
    for _ in range(trials):
        size = np.exp(generator.normal(size=regions + 1))
        scores = np.abs(generator.normal(size=(regions + 1, cells))) * size[:, None]
        predicted = np.full(((regions + 1) * cells, 4), 950.0)
        true = predicted + 1000.0 * scores.ravel()[:, None]
        region = np.repeat(np.arange(regions + 1).astype(str), cells)
        known = region != str(regions)
        half = calibrate_half_widths(predicted[known], true[known], region[known], 0.1, 50.0)
        inside = scores[-1] <= half.multipliers[0]
        covered += bool(np.mean(inside) >= 0.9)
    assert covered / trials >= regions / (regions + 1) - 4.0 * math.sqrt(0.1875 / trials)


def test_too_few_cells_give_an_infinite_multiplier_and_a_plain_record() -> None:
    predicted, true, region = invented(2, 5)
    half_widths = calibrate_half_widths(predicted, true, region, 0.1, 50.0)
    assert np.isinf(half_widths.multipliers).all()
    record = half_widths.as_record()
    assert record["multipliers"]["nn"] is None
    assert "2/3" in record["guarantee"]


def test_mismatched_points_are_refused() -> None:
    predicted, true, region = invented(2, 20)
    with pytest.raises(TrainingError, match="predictions and truth of the same points"):
        calibrate_half_widths(predicted, true[:-1], region, 0.1, 50.0)
