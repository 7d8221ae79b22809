"""Transformer and regressors: scikit-learn's own battery, and what an emitter relies on."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.special import ndtri
from sklearn.base import clone
from sklearn.utils.estimator_checks import estimator_checks_generator

from learnclosure.closures.preprocessing import ClippedQuantileNormal
from learnclosure.closures.regressors import (
    BoostingRegressor,
    ForestRegressor,
    MeanRegressor,
    PerceptronRegressor,
    RidgeRegressor,
    make_regressor,
)
from learnclosure.errors import TrainingError

NAMES = ("ridge", "extra-trees", "histogram-boosting", "mlp", "trees-and-mlp")
ESTIMATORS = (
    ClippedQuantileNormal(),
    RidgeRegressor(),
    ForestRegressor(n_estimators=8),
    BoostingRegressor(max_iter=15, learning_rate=0.3),
    PerceptronRegressor(hidden_layers=(8,), learning_rate=2e-2, epochs=25, batch=32),
    MeanRegressor([RidgeRegressor(), ForestRegressor(n_estimators=8)]),
)
WEIGHTS_CHECK = "check_sample_weight_equivalence_on_dense_data"


def known_differences(estimator: Any) -> dict[str, str]:
    """Name the checks that cannot hold for a random fit, and why."""
    if isinstance(estimator, ForestRegressor | MeanRegressor):
        return {WEIGHTS_CHECK: "leaf sizes and random splits count rows, not weights"}
    if isinstance(estimator, PerceptronRegressor):
        return {WEIGHTS_CHECK: "random batches count rows, not weights"}
    return {}


def battery(estimator: Any) -> list[tuple[str, Any, Callable[[Any], None]]]:
    """Return scikit-learn's checks of an estimator by name, but for other array libraries."""
    return [
        (check.func.__name__, subject, check)
        for subject, check in estimator_checks_generator(estimator)
        if "array_api" not in check.func.__name__
    ]


@pytest.mark.parametrize("estimator", ESTIMATORS, ids=lambda e: type(e).__name__)
def test_passes_the_common_battery(estimator: Any) -> None:
    checks = battery(estimator)
    assert len(checks) >= 40
    different = known_differences(estimator)
    failed = {}
    for name, subject, check in checks:
        try:
            check(clone(subject))
        except AssertionError as failure:
            failed[name] = str(failure)
    assert failed.keys() == different.keys(), failed


def sample(rows: int = 600, features: int = 5) -> tuple[np.ndarray, np.ndarray]:
    """Draw an invented smooth law with four outputs."""
    generator = np.random.default_rng(3)
    x = generator.normal(size=(rows, features))
    y = np.column_stack(
        [x[:, 0] + 2.0 * x[:, 1], np.sin(x[:, 0]), x[:, 2] * x[:, 3], np.exp(0.3 * x[:, 4])]
    )
    return x, y


def test_scores_are_those_of_the_normal_quantile_at_the_knots() -> None:
    x = np.arange(1.0, 10_000.0)[:, None]
    transformer = ClippedQuantileNormal().fit(x)
    level = np.array([0.02, 0.25, 0.5, 0.75, 0.98])
    scores = transformer.transform(1e4 * level[:, None]).ravel()
    # Between 33 knots the normal quantile is replaced by chords.
    np.testing.assert_allclose(scores, ndtri(level), atol=0.02)


def test_scores_stay_within_the_outermost_knots() -> None:
    transformer = ClippedQuantileNormal().fit(np.arange(1000.0)[:, None])
    low, high = transformer.transform([[-1e30], [1e30]]).ravel()
    assert (low, high) == pytest.approx((-ndtri(0.99), ndtri(0.99)))


def test_whole_number_and_constant_features_give_few_finite_knots() -> None:
    x = np.column_stack([np.repeat([0.0, 1.0], 50), np.full(100, 7.0)])
    transformer = ClippedQuantileNormal().fit(x)
    assert transformer.knots_[0].tolist() == [0.0, 1.0]
    assert transformer.knots_[1].tolist() == [7.0]
    scores = transformer.transform(x)
    assert np.all(scores[:, 1] == 0.0)
    assert scores[0, 0] < 0.0 < scores[-1, 0]


@settings(derandomize=True, max_examples=30, deadline=None)
@given(st.lists(st.floats(-1e6, 1e6), min_size=2, max_size=60))
def test_scores_never_decrease(values: list[float]) -> None:
    x = np.array(values)[:, None]
    transformer = ClippedQuantileNormal().fit(x)
    ordered = np.sort(np.concatenate([x.ravel(), np.linspace(-1e6, 1e6, 101)]))[:, None]
    scores = transformer.transform(ordered).ravel()
    assert np.all(np.diff(scores) >= 0.0)
    assert all(np.all(np.diff(knots) > 0.0) for knots in transformer.knots_)


@pytest.mark.parametrize("name", NAMES)
def test_a_fit_repeats_to_the_last_bit(name: str) -> None:
    x, y = sample()
    first = make_regressor(name, 5).fit(x, y).predict(x)
    second = make_regressor(name, 5).fit(x, y).predict(x)
    assert first.shape == (600, 4)
    assert np.array_equal(first, second)


@pytest.mark.parametrize("name", NAMES)
def test_weights_change_a_fit(name: str) -> None:
    x, y = sample()
    weight = np.where(x[:, 0] > 0.0, 10.0, 0.1)
    plain = make_regressor(name, 5).fit(x, y).predict(x)
    weighted = make_regressor(name, 5).fit(x, y, sample_weight=weight).predict(x)
    assert np.max(np.abs(plain - weighted)) > 1e-3


def test_a_mean_of_fitted_parts_equals_a_mean_that_fits_its_parts() -> None:
    x, y = sample()
    parts = [make_regressor(name, 5).fit(x, y) for name in ("extra-trees", "mlp")]
    joined = MeanRegressor.from_fitted(parts).predict(x)
    assert np.array_equal(joined, make_regressor("trees-and-mlp", 5).fit(x, y).predict(x))
    np.testing.assert_allclose(joined, 0.5 * (parts[0].predict(x) + parts[1].predict(x)))


def test_a_forest_predicts_alike_for_inputs_that_round_to_the_same_single() -> None:
    x, y = sample()
    forest = ForestRegressor(n_estimators=8).fit(x, y)
    assert np.array_equal(forest.predict(x), forest.predict(x.astype(np.float32)))


def test_boosting_sets_no_threshold_on_a_value_of_the_sample() -> None:
    # Where one lay on a value, rounding in another runtime would decide the branch.
    x, y = sample()
    x[:, 2] = np.round(x[:, 2])
    weight = np.linspace(0.5, 2.0, len(x))
    boosting = BoostingRegressor(max_iter=20).fit(x, y, sample_weight=weight)
    for booster in boosting.boosters_:
        for (predictor,) in booster._predictors:
            nodes = predictor.nodes[predictor.nodes["is_leaf"] == 0]
            for node in nodes:
                gap = np.abs(x[:, node["feature_idx"]] - node["num_threshold"]).min()
                assert gap > 1e-9


def test_exported_size_of_a_forest_is_bounded() -> None:
    x, y = sample(4000)
    forest = make_regressor("extra-trees", 0).fit(x, y)
    leaves = sum(int(tree.get_n_leaves()) for tree in forest.forest_.estimators_)
    # A node of the graph costs about 110 bytes a leaf with four outputs.
    assert leaves * 110 < 2.5e6


def test_public_attributes_carry_the_whole_prediction() -> None:
    x, y = sample()
    ridge = make_regressor("ridge", 0).fit(x, y)
    scores = ridge.transformer_.transform(x)
    np.testing.assert_array_equal(
        ridge.predict(x), scores @ ridge.coefficients_.T + ridge.intercept_
    )
    mlp = make_regressor("mlp", 0).fit(x, y)
    values = mlp.transformer_.transform(x)
    for number, (weights, biases) in enumerate(zip(mlp.weights_, mlp.biases_, strict=True)):
        values = values @ weights + biases
        if number < len(mlp.weights_) - 1:
            values = np.tanh(values)
    np.testing.assert_allclose(mlp.predict(x), values, rtol=1e-13, atol=1e-13)
    assert clone(mlp).get_params() == mlp.get_params()


def test_an_unknown_regressor_is_refused_by_name() -> None:
    with pytest.raises(TrainingError, match=r"no such regressor \(found 'svm', expected ridge"):
        make_regressor("svm", 0)
