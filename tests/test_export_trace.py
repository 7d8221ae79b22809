import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from export_cases import evaluate_twice
from learnclosure.closures.constraints import bounded_tensor
from learnclosure.export.builder import GraphBuilder
from learnclosure.export.trace import Traced, TracingNamespace
from learnclosure.features.frames import frame_axes, tensor_to_frame, tensor_to_model

NUMBERS = st.floats(-1e3, 1e3, allow_nan=False)
EXACT = {
    "add": lambda _xp, a, b: a + b,
    "subtract": lambda _xp, a, b: a - b,
    "multiply": lambda _xp, a, b: a * b,
    "divide": lambda xp, a, b: a / (xp.abs(b) + 0.5),
    "negate": lambda _xp, a, b: -a - b,
    "root": lambda xp, a, b: xp.sqrt(xp.abs(a)) + b,
    "maximum": lambda xp, a, b: xp.maximum(a, b),
    "minimum": lambda xp, a, b: xp.minimum(a, b),
    "sign": lambda xp, a, b: xp.sign(a) * b,
    "below": lambda xp, a, b: xp.where(a < b, a, 2.0),
    "at most": lambda xp, a, b: xp.where(a <= b, -1.0, b),
    "above": lambda xp, a, b: xp.where(a > b, b, a),
    "at least": lambda xp, a, b: xp.where(a >= b, 1.0, 3.0),
}
EXPRESSIONS = st.recursive(
    st.sampled_from(["x", "y"]) | NUMBERS,
    lambda inner: st.tuples(st.sampled_from(sorted(EXACT)), inner, inner),
    max_leaves=12,
)


def evaluate(xp, expression, values):
    if isinstance(expression, tuple):
        name, first, second = expression
        return EXACT[name](xp, evaluate(xp, first, values), evaluate(xp, second, values))
    return values.get(expression, expression) if isinstance(expression, str) else expression


def traced_model(function, names=("x", "y")):
    builder = GraphBuilder()
    inputs = {name: Traced(builder, builder.input(name)) for name in names}
    results = function(TracingNamespace(builder), inputs)
    for number, result in enumerate(results):
        builder.output(f"result_{number}", result.name)
    return builder.model("test", "", {})


@settings(derandomize=True, max_examples=60, deadline=None)
@given(EXPRESSIONS, st.lists(st.tuples(NUMBERS, NUMBERS), min_size=1, max_size=5))
def test_elementwise_code_gives_the_same_bits_in_the_graph(expression, points):
    x, y = (np.array(column) for column in zip(*points, strict=True))
    expected = np.broadcast_to(evaluate(np, ("add", expression, "x"), {"x": x, "y": y}), x.shape)
    model = traced_model(lambda xp, values: [evaluate(xp, ("add", expression, "x"), values)])
    used = {value.name for value in model.graph.input}
    feed = {n: v[:, None] for n, v in (("x", x), ("y", y)) if n in used}
    run, plain = evaluate_twice(model, feed)
    assert np.array_equal(run[0][:, 0], expected)
    assert np.array_equal(plain[0][:, 0], expected)


def test_exponential_and_logarithm_agree_to_rounding():
    model = traced_model(lambda xp, v: [xp.exp(v["x"]), xp.log(v["y"])])
    x = np.linspace(-30.0, 30.0, 501)
    y = np.logspace(-12, 12, 501)
    run, _ = evaluate_twice(model, {"x": x[:, None], "y": y[:, None]})
    assert run[0][:, 0] == pytest.approx(np.exp(x), rel=1e-15)
    assert run[1][:, 0] == pytest.approx(np.log(y), rel=1e-15, abs=1e-16)


def test_frames_and_bounds_give_the_same_bits_in_the_graph():
    names = ("pv_gradient_x", "pv_gradient_y", "coriolis_parameter", "a", "b", "c", "d")
    random = np.random.default_rng(3)
    columns = {name: random.normal(size=400) for name in names}
    for name in names[:3]:
        columns[name] *= 1e-11
        columns[name][:40] = 0.0

    def function(xp, v):
        axes = frame_axes(xp, v)
        there = tensor_to_frame(xp, axes, v["a"], v["b"], v["c"], v["d"])
        bounded = bounded_tensor(xp, *there, 0.1, 0.9)
        return [*bounded, *tensor_to_model(xp, axes, *bounded)]

    model = traced_model(function, names)
    run, _ = evaluate_twice(model, {name: v[:, None] for name, v in columns.items()})
    for found, expected in zip(run, function(np, columns), strict=True):
        assert np.array_equal(found[:, 0], expected)


def test_division_by_a_constant_stays_a_division():
    # onnxruntime issue 4130: a reciprocal in its place moves values across thresholds.
    model = traced_model(lambda _xp, v: [v["x"] / 3.0])
    assert [node.op_type for node in model.graph.node] == ["Div", "Identity"]


def test_equal_constants_and_equal_operations_are_stored_once():
    model = traced_model(lambda xp, v: [(v["x"] + 2.0) * (v["x"] + 2.0) + xp.sqrt(v["x"] + 2.0)])
    assert [node.op_type for node in model.graph.node] == ["Add", "Mul", "Sqrt", "Add", "Identity"]
    assert len(model.graph.initializer) == 1


def test_positive_and_negative_zero_are_different_constants():
    builder = GraphBuilder()
    assert builder.constant(0.0) != builder.constant(-0.0)


def test_what_no_output_needs_is_left_out():
    builder = GraphBuilder()
    x = Traced(builder, builder.input("x"))
    unused = x * 7.0
    builder.output("y", (x + 1.0).name)
    model = builder.model("test", "", {})
    assert unused.name not in {name for node in model.graph.node for name in node.output}
    assert len(model.graph.initializer) == 1


def test_numpy_numbers_may_stand_on_the_left():
    model = traced_model(lambda _xp, v: [np.float64(2.0) * v["x"] - np.float64(1.0) / v["y"]])
    run, _ = evaluate_twice(model, {"x": np.array([[3.0]]), "y": np.array([[4.0]])})
    assert run[0] == 5.75


def test_plain_numbers_are_computed_at_once():
    builder = GraphBuilder()
    xp = TracingNamespace(builder)
    assert xp.maximum(2.0, xp.sqrt(9.0)) == 3.0
    assert xp.where(2.0 < 1.0, 5.0, 6.0) == 6.0


def test_a_traced_value_is_no_truth_value():
    builder = GraphBuilder()
    x = Traced(builder, builder.input("x"))
    with pytest.raises(TypeError, match=r"choose with xp\.where"):
        bool(x < 1.0)
    with pytest.raises(TypeError, match="equality"):
        x == 1.0  # noqa: B015
    with pytest.raises(TypeError, match="equality"):
        x != 1.0  # noqa: B015
