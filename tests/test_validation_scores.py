"""Scores are 1 for the truth, 0 for its mean, and depend on the weights given."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from learnclosure.errors import TrainingError
from learnclosure.validation.records import plain
from learnclosure.validation.scores import (
    amplitude_log_error,
    ceiling_scores,
    component_r2,
    flux_scores,
    half_width_coverage,
    mean_score,
    r_squared,
)
from learnclosure.validation.truth import down_gradient_flux, flux_truth, interior
from validation_cases import LAYERS, ROWS, constant_tensor, statistics

quiet = settings(max_examples=25, deadline=None, derandomize=True)
numbers = arrays(np.float64, 12, elements=st.floats(-1e3, 1e3, allow_subnormal=False))


@quiet
@given(numbers, arrays(np.float64, 12, elements=st.floats(0.1, 10)))
def test_r_squared_is_one_for_the_truth_and_zero_for_its_weighted_mean(true, weights):
    if np.ptp(true) < 1e-3:
        return
    mean = np.full(12, np.average(true, weights=weights))
    assert r_squared(true, true, weights) == 1.0
    assert r_squared(mean, true, weights) == pytest.approx(0.0, abs=1e-12)


def test_r_squared_by_hand():
    # Truth 0, 2 with weights 3, 1: mean 1/2, weighted variance 3/4 + 9/4 = 3; error 1 * 1.
    assert r_squared(np.array([0.0, 1.0]), np.array([0.0, 2.0]), np.array([3.0, 1.0])) == (
        pytest.approx(2 / 3)
    )
    assert r_squared(np.array([0.0, 1.0]), np.array([0.0, 2.0]), np.ones(2)) == pytest.approx(0.5)


def test_r_squared_without_variance_or_weight_is_undefined():
    assert np.isnan(r_squared(np.ones(3), np.ones(3), np.ones(3)))
    assert np.isnan(r_squared(np.arange(3.0), np.arange(3.0), np.zeros(3)))


def test_the_r_squared_of_a_noisy_repetition_is_its_reliability():
    # The highest R2 against a noisy truth is its reliability (Spearman 1904, from memory):
    # signal variance .8 in total variance 1.
    random = np.random.default_rng(0)
    signal = np.sqrt(0.8) * random.normal(size=200_000)
    target = signal + np.sqrt(0.2) * random.normal(size=signal.size)
    assert r_squared(signal, target, np.ones(signal.size)) == pytest.approx(0.8, abs=0.01)


def test_components_are_scored_layer_by_layer():
    random = np.random.default_rng(1)
    true = random.normal(size=(40, 4))
    layer = np.repeat([0, 1], 20)
    predicted = true.copy()
    predicted[20:, 3] = true[20:, 3].mean()
    scores = component_r2(predicted, true, layer, np.ones(40))
    assert scores["xx"] == [1.0, 1.0]
    assert scores["yy"][0] == 1.0
    assert scores["yy"][1] == pytest.approx(0.0, abs=1e-12)


def test_amplitude_error_is_the_logarithm_of_the_trace_ratio():
    true = np.tile([1000.0, 7.0, -7.0, 3000.0], (6, 1))
    error = amplitude_log_error(2.0 * true, true, np.zeros(6, int), np.ones(6))
    assert error == pytest.approx([np.log(2.0)])
    assert np.isnan(amplitude_log_error(-true, true, np.zeros(6, int), np.ones(6))[0])


def test_coverage_is_a_share_of_the_area():
    true = np.zeros((2, 4))
    predicted = np.array([[1.0] * 4, [3.0] * 4])
    covered = half_width_coverage(
        predicted, true, np.full((2, 4), 2.0), np.zeros(2, int), np.array([1.0, 3.0])
    )
    assert covered["xy"] == [0.25]


def test_the_tensor_that_made_the_fluxes_scores_one_throughout():
    truth = flux_truth(statistics("a", 0))
    scores = flux_scores(constant_tensor(), truth)
    for name in ("flux_r2", "divergence_r2", "flux_r2_full", "divergence_r2_full"):
        np.testing.assert_allclose(scores[name], [1.0] * LAYERS, atol=1e-12)


def test_no_flux_scores_zero_when_the_true_flux_has_no_mean():
    # Fluxes of a constant tensor over a periodic box average to zero.
    truth = flux_truth(statistics("a", 0))
    scores = flux_scores(0.0 * constant_tensor(), truth)
    np.testing.assert_allclose(scores["flux_r2"], [0.0] * LAYERS, atol=1e-12)
    np.testing.assert_allclose(scores["divergence_r2"], [0.0] * LAYERS, atol=1e-12)


def test_a_constant_antisymmetric_part_changes_the_flux_score_but_not_that_of_divergence():
    # Uniform alpha carries a purely rotational flux: no effect on any tracer.
    truth = flux_truth(statistics("a", 0))
    turned = constant_tensor()
    turned[1] -= 1500.0
    turned[2] += 1500.0
    scores = flux_scores(turned, truth)
    assert max(scores["flux_r2"]) < 0.6
    np.testing.assert_allclose(scores["divergence_r2"], [1.0] * LAYERS, atol=1e-10)


def test_weights_change_flux_scores():
    data = statistics("a", 0)
    wrong = constant_tensor()
    wrong[:, :, : ROWS // 2] *= 0.2
    before = flux_scores(wrong, flux_truth(data))["flux_r2"]
    data["wet_share"][:, : ROWS // 2] = 0.1
    after = flux_scores(wrong, flux_truth(data))["flux_r2"]
    assert min(np.array(after) - np.array(before)) > 0.1


def test_cells_without_a_prediction_or_a_truth_do_not_count():
    data = statistics("a", 0)
    data["valid"][:, 3:5, 4:7] = 0.0
    for pair in ("xx", "xy", "yx", "yy"):
        data[f"transport_tensor_{pair}"][:, 3:5, 4:7] = np.nan
    predicted = constant_tensor()
    predicted[:, :, 8, 8] = np.nan
    scores = flux_scores(predicted, flux_truth(data))
    np.testing.assert_allclose(scores["flux_r2"], 1.0, atol=1e-12)
    np.testing.assert_allclose(scores["divergence_r2"], 1.0, atol=1e-12)


def test_interior_leaves_out_the_neighbours_of_undetermined_cells():
    truth = flux_truth(statistics("a", 0))
    weights = truth.weights.copy()
    weights[0, 5, 5] = 0.0
    inner = interior(weights, truth.geometry)
    gone = {tuple(place) for place in np.argwhere(inner[0] == 0.0).tolist()}
    assert gone == {(5, 5), (4, 5), (6, 5), (5, 4), (5, 6)}
    assert (inner[1] > 0.0).all()


def test_the_ceiling_falls_with_noise_and_is_one_without():
    exact = ceiling_scores(flux_truth(statistics("a", 0)))
    np.testing.assert_allclose(exact["flux_r2"], 1.0, atol=1e-12)
    noisy = ceiling_scores(flux_truth(statistics("a", 0, noise=0.5)))
    assert max(noisy["flux_r2"]) < 0.9


def test_without_halves_there_is_no_ceiling_and_the_full_ensemble_is_scored():
    truth = flux_truth(statistics("a", 0, halves=False))
    assert ceiling_scores(truth) is None
    scores = flux_scores(constant_tensor(), truth)
    assert scores["flux_r2"] == scores["flux_r2_full"]


def test_withheld_tracers_are_scored_if_there_are_any_otherwise_all():
    assert flux_truth(statistics("a", 0)).tracers == ("dye",)
    everything = flux_truth(statistics("a", 0, withheld=False))
    assert everything.tracers == ("salt", "dye")
    assert not everything.withheld


def test_flux_runs_down_the_gradient_row_by_row():
    tensor = np.array([1600.0, -800.0, 800.0, 1600.0])[:, None, None, None]
    slope = np.array([1e-6, 0.0])[:, None, None, None]
    flux = down_gradient_flux(np.broadcast_to(tensor, (4, 1, 1, 1)), slope)
    np.testing.assert_allclose(flux.ravel(), [-0.0016, -0.0008])


def test_statistics_without_a_determined_cell_are_refused():
    data = statistics("atlantis", 0)
    data["valid"][:] = 0.0
    with pytest.raises(TrainingError, match=r"region 'atlantis': no cell .*add members"):
        flux_truth(data)


def test_statistics_that_lack_a_variable_are_refused_by_name():
    data = statistics("a", 0).drop_vars("dye_eddy_flux_y")
    with pytest.raises(TrainingError, match="'dye_eddy_flux_y' is missing"):
        flux_truth(data)


def test_undefined_scores_are_left_out_of_means_and_become_null_in_records():
    assert mean_score([0.5, float("nan"), 0.7]) == pytest.approx(0.6)
    assert np.isnan(mean_score([float("nan")]))
    record = plain({"a": np.array([1 / 3, np.inf]), "b": np.bool_(True), "c": np.int64(3)})
    assert record == {"a": [0.333333, None], "b": True, "c": 3}
