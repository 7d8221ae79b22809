"""The variant in single precision: the same closure within the tolerance it states."""

from __future__ import annotations

import json
import shutil

import numpy as np
import onnx
import pytest

from export_cases import closure, export, table
from hostile_bundles import renew_sums
from learnclosure.errors import BundleError
from learnclosure.export.gate import verify_bundle
from learnclosure.export.predictor import load_predictor
from learnclosure.export.reference import SINGLE_LIMIT, largest_difference
from learnclosure.study import ExportSettings


@pytest.fixture(scope="module")
def shipped(tmp_path_factory):
    return export(tmp_path_factory.mktemp("shipped") / "bundle", regressor="mlp")


def changed(shipped, tmp_path, **record):
    copy = shutil.copytree(shipped, tmp_path / "copy")
    manifest = json.loads((copy / "manifest.json").read_text())
    manifest["single_precision"].update(record)
    (copy / "manifest.json").write_text(json.dumps(manifest))
    return copy


def test_it_agrees_within_its_stated_tolerance_on_other_points(shipped):
    inputs = {name: values[3::7] for name, values in table("local-energy").inputs.items()}
    double, single = load_predictor(shipped), load_predictor(shipped, single=True)
    difference, _ = largest_difference(single(inputs), double(inputs))
    assert 1e-9 < difference < double.manifest["single_precision"]["tolerance"] < SINGLE_LIMIT


def test_tensors_keep_their_bounds_since_constraints_stay_double(shipped):
    inputs = {name: values * 3.0 for name, values in table("local-energy").inputs.items()}
    found = load_predictor(shipped, single=True)(inputs)
    xx, xy, yx, yy = (found[f"transport_tensor_{pair}"] for pair in ("xx", "xy", "yx", "yy"))
    radius = np.hypot(0.5 * (xx - yy), 0.5 * (xy + yx))
    settings = closure("local-energy", "mlp").settings
    assert np.min(0.5 * (xx + yy) - radius) >= settings.floor * (1.0 - 1e-9)
    assert np.max(0.5 * (xx + yy) + radius) <= settings.cap * (1.0 + 1e-9)


def test_its_products_are_single_and_its_inputs_double(shipped):
    graph = onnx.load_model(shipped / "closure_float32.onnx").graph
    weights = {tensor.name: tensor.data_type for tensor in graph.initializer}
    for node in graph.node:
        if node.op_type == "MatMul":
            assert weights[node.input[1]] == onnx.TensorProto.FLOAT
    for value in (*graph.input, *graph.output):
        assert value.type.tensor_type.elem_type == onnx.TensorProto.DOUBLE


def test_trees_have_no_such_variant(tmp_path):
    folder = export(tmp_path / "bundle", regressor="histogram-boosting")
    assert not (folder / "closure_float32.onnx").exists()
    with pytest.raises(BundleError, match="has no variant in single precision; run it in double"):
        load_predictor(folder, single=True)


def test_a_study_may_leave_it_out(tmp_path):
    settings = ExportSettings(single_precision=False)
    folder = export(tmp_path / "bundle", regressor="mlp", settings=settings)
    assert not (folder / "closure_float32.onnx").exists()
    assert verify_bundle(folder).passed


@pytest.mark.parametrize(
    ("record", "found"),
    [
        ({"tolerance": 1e-9}, "at most 1e-09"),
        ({"tolerance": 1.0}, "a tolerance of 1.0, at most 1e-04"),
        ({"tolerance": "loose"}, "a tolerance of 'loose'"),
    ],
)
def test_a_tolerance_too_tight_or_too_loose_is_refused(shipped, tmp_path, record, found):
    copy = changed(shipped, tmp_path, **record)
    renew_sums(copy)
    last = verify_bundle(copy).checks[-1]
    assert (last.name, last.rule) == ("single precision", "single-precision")
    assert found in last.found


def test_a_variant_is_held_to_the_rules_of_graphs(shipped, tmp_path):
    copy = changed(shipped, tmp_path)
    model = onnx.load_model(copy / "closure_float32.onnx")
    model.graph.node.append(onnx.helper.make_node("NonZero", [model.graph.input[0].name], ["m"]))
    (copy / "closure_float32.onnx").write_bytes(model.SerializeToString())
    renew_sums(copy)
    last = verify_bundle(copy).checks[-1]
    assert (last.name, last.rule) == ("single precision graph", "operators")
    assert last.found.startswith("closure_float32.onnx: operator onnx.NonZero")
