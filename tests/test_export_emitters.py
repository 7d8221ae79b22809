from functools import cache
from types import SimpleNamespace

import numpy as np
import pytest
from onnx import TensorProto, helper
from skl2onnx import to_onnx
from sklearn.linear_model import Ridge
from sklearn.neural_network import MLPRegressor

from export_cases import evaluate_twice
from learnclosure.closures.preprocessing import ClippedQuantileNormal
from learnclosure.closures.regressors import (
    BoostingRegressor,
    ForestRegressor,
    MeanRegressor,
    PerceptronRegressor,
    RidgeRegressor,
)
from learnclosure.errors import BundleError
from learnclosure.export.builder import GraphBuilder
from learnclosure.export.emitters import emit_regressor, emit_scores
from learnclosure.export.runtime import open_session

FEATURES = 6
KINDS = ("ridge", "forest", "boosting", "mlp", "mean")


@cache
def sample():
    """Return features of unlike scales, one constant, one of whole numbers, and two outputs."""
    random = np.random.default_rng(5)
    features = random.normal(size=(1500, FEATURES)) * np.array([1.0, 1e-12, 1e6, 1.0, 1.0, 1.0])
    features[:, 3] = 7.0
    features[:, 4] = np.round(features[:, 4])
    outputs = np.column_stack(
        [features[:, 0] * features[:, 1] * 1e12, np.sin(features[:, 2] / 1e6) + features[:, 4]]
    )
    return features, outputs


@cache
def fitted(kind):
    parts = {
        "ridge": RidgeRegressor(),
        "forest": ForestRegressor(n_estimators=12, max_leaf_nodes=40),
        "boosting": BoostingRegressor(max_iter=15),
        "mlp": PerceptronRegressor(hidden_layers=(12, 8), epochs=8),
    }
    regressor = parts.get(kind) or MeanRegressor([parts["forest"], parts["mlp"]])
    return regressor.fit(*sample())


def graph_of(emit, outputs):
    builder = GraphBuilder()
    columns = [builder.input(f"feature_{number}") for number in range(FEATURES)]
    result = emit(builder, builder.node("Concat", columns, axis=1))
    parts = builder.nodes("Split", [result], outputs, axis=1, num_outputs=outputs)
    for number, name in enumerate(parts):
        builder.output(f"output_{number}", name)
    return builder.model("test", "", {})


def run_both(model, features):
    feed = {
        f"feature_{n}": np.ascontiguousarray(column)[:, None] for n, column in enumerate(features.T)
    }
    return tuple(np.concatenate(parts, axis=1) for parts in evaluate_twice(model, feed))


def regressor_graph(kind):
    return graph_of(lambda builder, matrix: emit_regressor(builder, fitted(kind), matrix), 2)


@pytest.mark.parametrize("kind", KINDS)
def test_a_regressor_predicts_the_same_in_the_graph(kind):
    features, outputs = sample()
    expected = fitted(kind).predict(features[:400])
    spread = outputs.std(axis=0)
    run, plain = run_both(regressor_graph(kind), features[:400])
    assert np.max(np.abs(run - expected) / spread) < 1e-13
    assert np.max(np.abs(plain - expected) / spread) < 1e-13


@pytest.mark.parametrize("kind", KINDS)
def test_the_number_of_points_given_at_once_does_not_matter(kind):
    features, outputs = sample()
    session = open_session(regressor_graph(kind).SerializeToString())

    def run(part):
        feed = {f"feature_{n}": np.ascontiguousarray(c)[:, None] for n, c in enumerate(part.T)}
        return np.concatenate(session.run(None, feed), axis=1)

    whole = run(features[:1000])
    for size in (1, 7):
        pieces = [run(features[start : start + size]) for start in range(0, 42, size)]
        difference = np.abs(np.concatenate(pieces) - whole[:42]) / outputs.std(axis=0)
        assert np.max(difference) < 1e-14


@pytest.mark.parametrize("kind", KINDS)
def test_values_far_outside_the_sample_predict_the_same(kind):
    features, outputs = sample()
    far = np.concatenate([features[:20] * factor for factor in (0.0, 1e-9, -30.0, 1e6)])
    run, _ = run_both(regressor_graph(kind), far)
    assert np.max(np.abs(run - fitted(kind).predict(far)) / outputs.std(axis=0)) < 1e-13


@pytest.mark.parametrize("kind", KINDS)
def test_a_value_that_is_not_a_number_does_not_stop_the_graph(kind):
    features = sample()[0][:5].copy()
    features[2] = np.nan
    run, _ = run_both(regressor_graph(kind), features)
    assert np.array_equal(
        run[[0, 1, 3, 4]], run_both(regressor_graph(kind), sample()[0][:5])[0][[0, 1, 3, 4]]
    )


def at_thresholds(thresholds, feature, neighbours):
    """Return points that differ from others only by one step of rounding at a threshold."""
    points = np.repeat(sample()[0][:1], len(thresholds) * len(neighbours), axis=0)
    points[:, feature] = np.concatenate([step(thresholds) for step in neighbours])
    return points


def test_no_leaf_of_boosted_trees_flips_at_a_threshold():
    nodes = np.concatenate(
        [p.nodes for booster in fitted("boosting").boosters_ for (p,) in booster._predictors]
    )
    inner = nodes[nodes["is_leaf"] == 0]
    model = regressor_graph("boosting")
    for feature in range(FEATURES):
        thresholds = inner["num_threshold"][inner["feature_idx"] == feature]
        if len(thresholds):
            steps = [
                lambda t: t,
                lambda t: np.nextafter(t, np.inf),
                lambda t: np.nextafter(t, -np.inf),
            ]
            points = at_thresholds(thresholds, feature, steps)
            expected = fitted("boosting").predict(points)
            # A flipped leaf would change the sum by far more than rounding.
            assert np.max(np.abs(run_both(model, points)[0] - expected)) < 1e-13


def test_no_leaf_of_a_forest_flips_at_a_threshold():
    trees = [estimator.tree_ for estimator in fitted("forest").forest_.estimators_]
    model = regressor_graph("forest")
    for feature in range(FEATURES):
        thresholds = np.concatenate([t.threshold[t.feature == feature] for t in trees])
        if len(thresholds):
            steps = [
                lambda t: t,
                lambda t: np.nextafter(t, np.inf),
                lambda t: np.nextafter(t, -np.inf),
                lambda t: np.nextafter(t.astype(np.float32), np.float32(np.inf)).astype(float),
                lambda t: np.nextafter(t.astype(np.float32), np.float32(-np.inf)).astype(float),
            ]
            points = at_thresholds(thresholds, feature, steps)
            expected = fitted("forest").predict(points)
            assert np.max(np.abs(run_both(model, points)[0] - expected)) < 1e-13


def test_scores_are_those_of_numpy_interpolation_at_and_between_knots():
    features, _ = sample()
    transformer = ClippedQuantileNormal().fit(features)
    model = graph_of(lambda builder, matrix: emit_scores(builder, transformer, matrix), FEATURES)
    longest = max(len(knots) for knots in transformer.knots_)
    knots = np.column_stack([np.resize(k, longest) for k in transformer.knots_])
    points = np.concatenate(
        [
            knots,
            np.nextafter(knots, np.inf),
            np.nextafter(knots, -np.inf),
            features[:200],
            knots * 9,
        ]
    )
    run, plain = run_both(model, points)
    expected = transformer.transform(points)
    assert np.max(np.abs(run - expected)) < 1e-14
    assert np.array_equal(run, plain)


def test_a_tree_that_is_one_leaf_is_kept():
    features, _ = sample()
    regressor = ForestRegressor(n_estimators=2).fit(features, np.full((len(features), 2), 3.25))
    assert regressor.forest_.estimators_[0].tree_.node_count == 1
    model = graph_of(lambda builder, matrix: emit_regressor(builder, regressor, matrix), 2)
    run, plain = run_both(model, features[:9])
    assert (run == 3.25).all()
    assert (plain == 3.25).all()


def test_ridge_agrees_with_an_independent_converter():
    # skl2onnx 1.20 is right for linear models in double: measured error below 3e-15.
    features, outputs = sample()
    regressor = fitted("ridge")
    scores = regressor.transformer_.transform(features)
    plain = Ridge(alpha=30.0, solver="cholesky").fit(scores, outputs)
    oracle = open_session(to_onnx(plain, scores[:1], target_opset=21).SerializeToString())
    expected = oracle.run(None, {"X": scores[:300]})[0]
    run, _ = run_both(regressor_graph("ridge"), features[:300])
    assert np.max(np.abs(run - expected) / outputs.std(axis=0)) < 1e-12


@pytest.mark.parametrize("activation", ["tanh", "relu"])
def test_a_perceptron_agrees_with_an_independent_converter(activation):
    features, outputs = sample()
    transformer = ClippedQuantileNormal().fit(features)
    scores = transformer.transform(features)
    model = MLPRegressor(hidden_layer_sizes=(10, 7), activation=activation, random_state=1)
    for _ in range(5):
        model.partial_fit(scores, outputs)
    # skl2onnx flattens several outputs; their order is kept.
    oracle = open_session(to_onnx(model, scores[:1], target_opset=21).SerializeToString())
    expected = oracle.run(None, {"X": scores[:300]})[0].reshape(300, 2)
    same = SimpleNamespace(
        kind="mlp",
        transformer_=transformer,
        weights_=model.coefs_,
        biases_=model.intercepts_,
        activation_=activation,
    )
    graph = graph_of(lambda builder, matrix: emit_regressor(builder, same, matrix), 2)
    run, _ = run_both(graph, features[:300])
    assert np.max(np.abs(run - expected) / outputs.std(axis=0)) < 1e-12
    assert np.max(np.abs(run - model.predict(scores[:300])) / outputs.std(axis=0)) < 1e-12


def test_everything_but_the_rounding_of_forest_features_is_double():
    kinds = {
        helper.get_node_attr_value(node, "to")
        for node in regressor_graph("mean").graph.node
        if node.op_type == "Cast"
    }
    assert kinds == {TensorProto.FLOAT, TensorProto.DOUBLE, TensorProto.INT64}
    assert TensorProto.FLOAT not in {
        tensor.data_type for tensor in regressor_graph("mean").graph.initializer
    }


def test_an_unknown_kind_of_regressor_is_refused():
    with pytest.raises(BundleError, match=r"no emitter .*found Ridge, expected ridge, forest"):
        graph_of(lambda builder, matrix: emit_regressor(builder, Ridge(), matrix), 1)
