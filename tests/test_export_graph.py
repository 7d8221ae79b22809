import numpy as np
import onnx
import pytest

from export_cases import closure, evaluate_twice, table
from learnclosure.closures.pointwise import UNBOUNDED, Outputs, flagged
from learnclosure.export.graph import build_graph
from learnclosure.export.reference import largest_difference, with_tails
from learnclosure.export.runtime import open_session, run_session
from learnclosure.quantities import INPUTS, OUTPUTS

CASES = [
    ("mean-field", "ridge", "log-cholesky"),
    ("mean-field", "trees-and-mlp", "linear"),
    ("mean-field", "histogram-boosting", "log-cholesky"),
    ("local-energy", "trees-and-mlp", "log-cholesky"),
    ("local-energy", "histogram-boosting", "linear"),
    ("local-energy", "mlp", "linear"),
]


def expected_outputs(fitted, inputs):
    prediction = fitted.predict(inputs)
    columns = (*prediction.tensor.T, *prediction.half_width.T, prediction.trust)
    return dict(zip(OUTPUTS, columns, strict=True))


def points(fitted, step):
    return {name: table(fitted.family).inputs[name][::step] for name in fitted.inputs_}


@pytest.mark.parametrize("case", CASES, ids="/".join)
def test_a_closure_and_its_graph_agree_on_and_far_off_the_regions(case):
    fitted = closure(*case)
    inputs = with_tails(points(fitted, 9))
    session = open_session(build_graph(fitted).SerializeToString())
    found = run_session(session, inputs, list(OUTPUTS))
    difference, place = largest_difference(found, expected_outputs(fitted, inputs))
    assert difference < 1e-13, place


def test_both_runtimes_agree():
    fitted = closure("local-energy", "ridge", "log-cholesky")
    feed = {name: values[:, None] for name, values in points(fitted, 50).items()}
    run, plain = evaluate_twice(build_graph(fitted), feed)
    for first, second in zip(run, plain, strict=True):
        assert np.allclose(first, second, rtol=1e-14, atol=1e-12)


def test_the_number_of_points_given_at_once_does_not_matter():
    fitted = closure("local-energy", "trees-and-mlp")
    inputs = points(fitted, 1)
    session = open_session(build_graph(fitted).SerializeToString())

    def run(chosen):
        feed = {name: values[chosen, None] for name, values in inputs.items()}
        return np.concatenate(session.run(list(OUTPUTS), feed), axis=1)

    whole = run(slice(0, 1000))
    for size in (1, 7):
        parts = [run(slice(start, start + size)) for start in range(0, 70, size)]
        assert np.concatenate(parts) == pytest.approx(whole[:70], rel=1e-12, abs=1e-9)


def test_inputs_and_outputs_are_named_doubles_in_si_units():
    fitted = closure("local-energy", "ridge")
    graph = build_graph(fitted)
    assert [value.name for value in graph.graph.input] == list(fitted.inputs_)
    assert [value.name for value in graph.graph.output] == list(OUTPUTS)
    for value in (*graph.graph.input, *graph.graph.output):
        kind = value.type.tensor_type
        assert kind.elem_type == onnx.TensorProto.DOUBLE
        assert [dim.dim_param or dim.dim_value for dim in kind.shape.dim] == ["N", 1]
    session = open_session(graph.SerializeToString())
    properties = session.get_modelmeta().custom_metadata_map
    for row in (*(INPUTS[name] for name in fitted.inputs_), *OUTPUTS.values()):
        assert properties[f"units.{row.name}"] == row.units
    assert properties["family"] == "local-energy"


def test_a_mean_field_graph_asks_for_no_eddy_energy():
    names = [value.name for value in build_graph(closure("mean-field", "ridge")).graph.input]
    assert not [name for name in names if INPUTS[name].energy]


def test_the_graph_says_what_it_needs_of_a_runtime():
    graph = build_graph(closure("mean-field", "ridge"))
    assert graph.ir_version == 10
    assert {(entry.domain, entry.version) for entry in graph.opset_import} == {
        ("", 21),
        ("ai.onnx.ml", 5),
    }


def test_equal_closures_give_equal_bytes():
    first = build_graph(closure("local-energy", "trees-and-mlp"))
    second = build_graph(closure("local-energy", "trees-and-mlp"))
    assert first.SerializeToString() == second.SerializeToString()


@pytest.mark.parametrize("value", [np.nan, np.inf, -np.inf, 1e300])
@pytest.mark.parametrize("case", [CASES[0], CASES[3]], ids="/".join)
def test_a_point_with_an_extreme_input_reaches_no_other_and_is_flagged_if_not_finite(case, value):
    fitted = closure(*case)
    inputs = {name: column[:40].copy() for name, column in points(fitted, 9).items()}
    session = open_session(build_graph(fitted).SerializeToString())
    whole = run_session(session, inputs, list(OUTPUTS))
    for number, name in enumerate(fitted.inputs_):
        inputs[name][number] = value
    found = run_session(session, inputs, list(OUTPUTS))
    count, floor = len(fitted.inputs_), fitted.settings.floor
    expectations = {"xx": floor, "xy": 0.0, "yx": 0.0, "yy": floor}
    for name, values in found.items():
        assert np.isfinite(values).all(), name
        assert np.array_equal(values[count:], whole[name][count:])
    if not np.isfinite(value):
        assert not found["trust"][:count].any()
        for pair, expected in expectations.items():
            assert (found[f"transport_tensor_{pair}"][:count] == expected).all()
            assert (found[f"half_width_{pair}"][:count] == UNBOUNDED).all()


def test_outputs_of_finite_inputs_are_flagged_only_where_they_overflow():
    fitted = closure("local-energy", "ridge")
    inputs = {name: column[:5].copy() for name, column in points(fitted, 9).items()}
    plain = fitted.predict(inputs)
    with np.errstate(all="ignore"):
        kept = flagged(np, list(inputs.values()), outputs_of(plain), 50.0)
        overflown = flagged(np, [np.array([1.0, np.inf])], outputs_of(plain, 2), 50.0)
    assert np.array_equal(np.column_stack(kept.tensor), plain.tensor)
    assert overflown.trust[0] == plain.trust[0]
    assert overflown.trust[1] == 0.0


def outputs_of(prediction, count=5):
    return Outputs(
        tuple(prediction.tensor[:count].T),
        tuple(prediction.half_width[:count].T),
        prediction.trust[:count],
    )
