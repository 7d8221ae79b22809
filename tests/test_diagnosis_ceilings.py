"""Reliability against members and snapshots is what exactly known laws say it is."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ceiling_cases import known_law_ensemble, member_products
from diagnosis_cases import box, random_ensemble
from learnclosure.diagnosis.ceiling_artefact import read_ceilings
from learnclosure.diagnosis.ceilings import member_counts
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.moments import accumulate_moments
from learnclosure.diagnosis.reliability import (
    CeilingCurve,
    NoiseReplicates,
    members_needed,
    noise_ratio,
    reliability_with,
    subset_noise,
)
from learnclosure.diagnosis.sampling import spearman_brown
from learnclosure.study import DiagnosisSettings

quick = settings(derandomize=True, deadline=None, max_examples=50)


@pytest.fixture(scope="module")
def known():
    """Diagnose an ensemble of known law."""
    ensemble, ratios = known_law_ensemble()
    chosen = DiagnosisSettings(coarsen=1, floor_method="projection")
    return diagnose(ensemble, chosen), ratios, len(ensemble.times)


@pytest.mark.parametrize(
    ("half", "whole"), [(0.25, 0.4), (0.5, 0.6667), (0.6, 0.75), (0.8, 0.8889)]
)
def test_two_halves_make_a_whole(half, whole):
    # Spearman 1910, Brown 1910 (from memory): 2r/(1+r), worked for four correlations.
    assert float(spearman_brown(np.array(half))) == pytest.approx(whole, abs=5e-5)


def test_the_prophecy_for_other_lengths():
    # k r/(1 + (k-1) r) for r = .5: three parts .75, nine parts .9, one part itself; and
    # lengthening twice by 2 is lengthening once by 4.
    half = np.array(0.5)
    assert spearman_brown(half, 3.0) == pytest.approx(0.75)
    assert spearman_brown(half, 9.0) == pytest.approx(0.9)
    assert spearman_brown(half, 1.0) == pytest.approx(0.5)
    twice = spearman_brown(spearman_brown(half))
    assert spearman_brown(half, 4.0) == pytest.approx(float(twice))


@given(
    ratio=st.floats(0.01, 1e3),
    members=st.integers(4, 60),
    data=st.data(),
)
@quick
def test_the_noise_ratio_is_got_back_from_the_correlation_it_causes(ratio, members, data):
    chosen = data.draw(st.integers(2, members // 2))
    shared, own = subset_noise(members, chosen)
    correlation = (1.0 + shared * ratio) / (1.0 + own * ratio)
    found = noise_ratio(np.array(correlation), shared, own, own)
    assert float(found) == pytest.approx(ratio, rel=1e-6)


def test_independent_halves_reduce_to_the_prophecy():
    # Noise of halves of m degrees of freedom: the whole of 2 m is Spearman and Brown's.
    r = np.array([0.1, 0.5, 0.9])
    ratio = noise_ratio(r, 0.0, 1 / 5, 1 / 5)
    np.testing.assert_allclose(reliability_with(ratio, 10.0), spearman_brown(r), rtol=1e-12)


def test_estimates_that_do_not_agree_have_no_signal():
    found = noise_ratio(np.array([-0.2, 0.0, np.nan]), 0.0, 0.2, 0.2)
    assert np.isinf(found[:2]).all()
    assert np.isnan(found[2])
    assert reliability_with(found, 11.0)[0] == 0.0


@pytest.mark.parametrize(("members", "chosen"), [(6, 2), (6, 3), (12, 4)])
def test_the_noise_of_a_subset_is_the_trace_of_its_matrices(members, chosen):
    # Covariance of u'Au c-forms of jointly normal u, c is tr(AB) (Searle 1971, Linear
    # Models, section 2.5; from memory); P projects on departures, D chooses members.
    P = np.eye(members) - 1.0 / members
    first, second = (
        P @ np.diag(np.isin(np.arange(members), part).astype(float)) @ P
        / (chosen * (1.0 - 1.0 / members))
        for part in (range(chosen), range(chosen, 2 * chosen))
    )  # fmt: skip
    shared, own = subset_noise(members, chosen)
    assert np.trace(first @ second) == pytest.approx(shared, rel=1e-12)
    assert np.trace(first @ first) == pytest.approx(own, rel=1e-12)


def test_subsets_are_unbiased_and_their_noise_is_as_said():
    # 4000 cells of normal members with covariance .5; four standard errors.
    random = np.random.default_rng(3)
    u = random.normal(size=(8, 4000))
    c = 0.5 * u + random.normal(size=u.shape)
    products = member_products(u, c) * 8 / 7
    one, other = products[:3].mean(axis=0), products[3:6].mean(axis=0)
    unit = 1.25 + 0.25
    shared, own = subset_noise(8, 3)
    assert one.mean() == pytest.approx(0.5, abs=4 * np.sqrt(own * unit / 4000))
    assert one.var() == pytest.approx(own * unit, rel=0.2)
    assert np.cov(one, other)[0, 1] == pytest.approx(shared * unit, abs=4 * own * unit / 63)


def test_a_subset_of_all_members_is_the_whole_ensemble():
    ensemble = random_ensemble(box(2, 6, 7), members=6)
    moments = accumulate_moments(ensemble, Coarsening(ensemble.grid, 1))
    mean, flux = moments.subset(np.arange(6))
    for name in ensemble.tracers:
        np.testing.assert_allclose(mean[name], moments.whole.mean[name], rtol=1e-12)
        np.testing.assert_allclose(flux[name], moments.whole.flux[name], rtol=1e-9, atol=1e-15)


def test_blocks_of_time_add_up_to_the_halves():
    ensemble = random_ensemble(box(1, 5, 6), members=5, times=7)
    moments = accumulate_moments(ensemble, Coarsening(ensemble.grid, 1))
    assert sum(moments.block_times) == 7
    assert len(moments.blocks) == 4
    for half in (0, 1):
        together = sum(
            count * block[half].flux["dye_a"]
            for count, block in zip(moments.block_times, moments.blocks, strict=True)
        )
        np.testing.assert_allclose(together / 7, moments.halves[half].flux["dye_a"], rtol=1e-12)


def test_reliability_against_members_follows_the_known_law(known):
    statistics, ratios, times = known
    counts = statistics["count"].values
    for count, found in zip(counts, statistics["ceiling_flux"].values[:, 0], strict=True):
        exact = np.mean(1.0 / (1.0 + ratios / (times * (count - 1))))
        assert found == pytest.approx(exact, abs=0.02), count
    measured = statistics["ceiling_measured"].values.astype(bool)
    assert counts[measured].tolist() == [4, 6, 8, 12]
    assert counts[~measured].max() == 48


def test_reliability_against_snapshots_follows_the_known_law(known):
    statistics, ratios, _ = known
    counts = statistics["snapshot_count"].values
    assert counts.tolist() == [1, 2, 4, 8, 16]
    found = statistics["ceiling_snapshots_flux"].values[:, 0]
    exact = [np.mean(1.0 / (1.0 + ratios / (count * 11))) for count in counts]
    np.testing.assert_allclose(found, exact, atol=0.02)


def test_of_a_tensor_that_varies_smoothly_the_shrunk_estimate_is_more_reliable():
    ensemble, _ = known_law_ensemble(members=8, times=2, side=24, wavelength=12.0)
    statistics = diagnose(ensemble, DiagnosisSettings(coarsen=1, floor_method="projection"))
    for pair in ("xx", "yy"):
        smooth = statistics[f"ceiling_transport_tensor_{pair}"].values
        plain = statistics[f"ceiling_least_squares_tensor_{pair}"].values
        assert (smooth > plain + 0.05).all()


def test_members_needed_is_the_law_turned_round():
    counts = np.array([4, 12, 24])
    ratio = 6.0
    curve = CeilingCurve(
        counts,
        reliability_with(np.array([[ratio]]), (counts[:, None] - 1.0)),
        np.full((3, 1), 0.01),
        2,
        1.0,
    )
    for reliability in (0.5, 0.9):
        needed = members_needed(curve, reliability)
        exact = 1.0 + ratio * reliability / (1.0 - reliability)
        assert needed.members[0] == pytest.approx(exact, rel=1e-12)
        assert needed.standard_error[0] > 0.0
    none = CeilingCurve(counts, np.zeros((3, 1)), np.zeros((3, 1)), 2, 1.0)
    assert np.isinf(members_needed(none, 0.9).members[0])


def flux_reliability(random, members, cells, ratio):
    """Estimate reliability from six splits, and its bootstrap error, of one drawn ensemble."""
    signal = np.sqrt(1.0 / ratio) * random.normal(size=cells)
    # Members' noise is the same over patches of ten cells, as eddies are.
    u, c = np.repeat(random.normal(size=(2, members, cells // 10)), 10, axis=-1)
    products = member_products(u, c) * members / (members - 1) + signal
    left_out = [
        (products.sum(axis=0) - products[i]) / (members - 1) for i in range(members)
    ]  # of sums about the mean of all: close enough to a covariance without member i
    half = members // 2
    shared, own = subset_noise(members, half)
    found = []
    for _ in range(6):
        order = random.permutation(members)
        one, other = (products[order[part]].mean(axis=0)
                      for part in (slice(half), slice(half, None)))  # fmt: skip
        found.append(np.corrcoef(one, other)[0, 1])
    value = reliability_with(noise_ratio(np.mean(found), shared, own, own), members - 1.0)
    choices = random.multinomial(members, np.full(members, 1 / members), 200).astype(float)
    place = (1, 1, 1, cells)
    noise = NoiseReplicates(
        products.mean(axis=0).reshape(place),
        [values.reshape(place) for values in left_out],
        np.ones((1, 1, cells)),
        choices,
    )
    return float(value), float(noise.standard_error(members - 1.0)[0])


def test_bootstrap_bars_are_as_wide_as_the_scatter_over_ensembles():
    random = np.random.default_rng(11)
    found = np.array([flux_reliability(random, 12, 600, 8.0) for _ in range(60)])
    assert found[:, 0].mean() == pytest.approx(11 / (11 + 8.0), abs=0.03)
    # Signal and noise are themselves drawn in each ensemble.
    assert 0.5 < found[:, 1].mean() / found[:, 0].std() < 1.6


def test_sizes_measured_are_even_and_end_with_the_ensemble():
    assert member_counts(3) == []
    assert member_counts(5) == [4]
    assert member_counts(12) == [4, 6, 8, 12]
    assert member_counts(23) == [4, 6, 8, 12, 16, 22]


def test_curves_are_read_as_they_were_written_and_can_be_left_out():
    ensemble = random_ensemble(box(1, 8, 9), members=5, times=3)
    chosen = DiagnosisSettings(coarsen=1, ceiling_draws=2)
    statistics = diagnose(ensemble, chosen)
    again = diagnose(ensemble, chosen)
    for name in statistics.variables:
        np.testing.assert_array_equal(statistics[name].values, again[name].values)
    ceilings = read_ceilings(statistics)
    assert set(ceilings.members) == set(ceilings.snapshots)
    assert "least_squares_tensor_yx" in ceilings.members
    curve = ceilings.members["flux"]
    assert curve.counts[curve.measured - 1] == 4
    np.testing.assert_array_equal(curve.reliability, statistics["ceiling_flux"].values)
    without = diagnose(ensemble, DiagnosisSettings(coarsen=1, ceiling_draws=0))
    assert read_ceilings(without) is None
    assert not any("ceiling" in str(name) for name in without.variables)
