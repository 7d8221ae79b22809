import json
import shutil

import numpy as np
import onnx
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from onnx import TensorProto, helper, numpy_helper

from export_cases import export
from learnclosure.errors import BundleError
from learnclosure.export import layout
from learnclosure.export.gate import verify_bundle
from learnclosure.export.graph_checks import inspect_graph
from learnclosure.export.layout import LARGEST_SIZES, sums_text
from learnclosure.export.predictor import load_predictor
from learnclosure.export.rules import RULES


@pytest.fixture(scope="module")
def good(tmp_path_factory):
    return export(tmp_path_factory.mktemp("good") / "bundle", regressor="histogram-boosting")


@pytest.fixture
def copy(good, tmp_path):
    return shutil.copytree(good, tmp_path / "copy")


@pytest.fixture
def model(good):
    return onnx.load_model(good / "closure.onnx")


def renew_sums(folder):
    files = {path.name: path.read_bytes() for path in folder.iterdir()}
    (folder / "SHA256SUMS").write_bytes(sums_text(files))


def refusal(model):
    """Return name and finding of the check a graph fails."""
    found, checks = inspect_graph(model.SerializeToString())
    assert found is None
    assert all(check.passed for check in checks[:-1])
    assert not checks[-1].passed
    return f"{checks[-1].name}: {checks[-1].found}"


def node_of(model, operator):
    return next(node for node in model.graph.node if node.op_type == operator)


def attribute_of(node, name):
    return next(attribute for attribute in node.attribute if attribute.name == name)


@pytest.mark.parametrize("name", sorted(LARGEST_SIZES))
@pytest.mark.parametrize("place", [0.0, 0.37, 0.999])
def test_one_changed_byte_in_any_file_fails(copy, name, place):
    content = bytearray((copy / name).read_bytes())
    content[int(place * len(content))] ^= 1
    (copy / name).write_bytes(bytes(content))
    outcome = verify_bundle(copy)
    assert not outcome.passed
    assert outcome.checks[-1].name == "sums"
    with pytest.raises(BundleError, match="the check of sums failed"):
        load_predictor(copy)


def test_an_added_missing_or_linked_file_fails(copy):
    (copy / "note.txt").write_text("extra")
    assert "unexpected note.txt" in verify_bundle(copy).checks[-1].found
    (copy / "note.txt").unlink()
    (copy / "MODEL_CARD.md").rename(copy.parent / "card")
    assert "missing MODEL_CARD.md" in verify_bundle(copy).checks[-1].found
    (copy / "MODEL_CARD.md").symlink_to(copy.parent / "card")
    assert "not a plain file" in verify_bundle(copy).checks[-1].found


def test_a_file_beyond_its_size_is_not_read(copy):
    with (copy / "SHA256SUMS").open("ab") as stream:
        stream.write(b" " * 5000)
    outcome = verify_bundle(copy)
    assert outcome.checks[-1].found == "SHA256SUMS is larger than 4096 bytes"


def test_what_is_no_bundle_is_said_in_one_sentence(tmp_path, copy):
    with pytest.raises(BundleError, match=r"nowhere: is not a folder .*; give the folder"):
        verify_bundle(tmp_path / "nowhere")
    (tmp_path / "empty").mkdir()
    with pytest.raises(BundleError, match=r"is not a bundle \(expected a file manifest\.json\)"):
        verify_bundle(tmp_path / "empty")
    (copy / "manifest.json").write_text("{")
    renew_sums(copy)
    last = verify_bundle(copy).checks[-1]
    assert (last.name, last.rule, last.found) == ("schema", "manifest-json", "is not a JSON object")


def test_an_unreadable_bundle_is_said_in_one_sentence(copy, monkeypatch):
    # The superuser may read every file, so the system's refusal is played.
    def refuse(path, flags):
        raise PermissionError(13, "Permission denied")

    monkeypatch.setattr(layout.os, "open", refuse)
    with pytest.raises(BundleError, match="cannot be read: Permission denied"):
        verify_bundle(copy)


@pytest.mark.parametrize(
    ("change", "check", "found"),
    [
        (lambda m: m.pop("training"), "manifest form", "no dict under training"),
        (lambda m: m.update(schema="0"), "schema", "schema '0'"),
        (lambda m: m.update(family="mean-field"), "manifest form", "family 'mean-field'"),
        (lambda m: m["inputs"].reverse(), "declared inputs", "in the graph"),
        (lambda m: m["inputs"].pop(), "declared inputs", "in the graph"),
        (lambda m: m["inputs"][0].update(units="km s-1"), "declared inputs", "'km s-1'"),
        (lambda m: m["outputs"][0].update(dtype="float32"), "declared outputs", "'float32'"),
        (lambda m: m["reference"].update(points=1), "reference points", "1 declared"),
    ],
)
def test_a_manifest_that_contradicts_the_graph_fails(copy, change, check, found):
    manifest = json.loads((copy / "manifest.json").read_text())
    change(manifest)
    (copy / "manifest.json").write_text(json.dumps(manifest))
    renew_sums(copy)
    failed = [entry for entry in verify_bundle(copy).checks if not entry.passed]
    assert [entry.name for entry in failed] == [check]
    assert found in failed[0].found


def test_a_manifest_cannot_loosen_the_limit(copy, model):
    manifest = json.loads((copy / "manifest.json").read_text())
    manifest["reference"]["limit"] = 1.0
    (copy / "manifest.json").write_text(json.dumps(manifest))
    weights = attribute_of(node_of(model, "TreeEnsemble"), "leaf_weights")
    weights.t.CopyFrom(numpy_helper.from_array(numpy_helper.to_array(weights.t) * (1.0 + 1e-9)))
    (copy / "closure.onnx").write_bytes(model.SerializeToString())
    renew_sums(copy)
    last = verify_bundle(copy).checks[-1]
    assert last.name == "reference outputs"
    assert not last.passed
    assert last.limit == 1e-12 < last.value < 1e-7


def test_reference_points_that_are_no_netcdf_fail(copy):
    (copy / "reference.nc").write_bytes(b"not a file of that kind")
    renew_sums(copy)
    last = verify_bundle(copy).checks[-1]
    assert (last.name, last.passed) == ("reference points", False)


def test_a_good_graph_passes_every_static_check(model):
    found, checks = inspect_graph(model.SerializeToString())
    assert found == model
    assert len(checks) == 7


def test_bytes_that_are_no_graph_are_refused():
    assert inspect_graph(b"\xff" * 40)[0] is None
    assert inspect_graph(b"")[0] is None


@settings(max_examples=60, deadline=None, derandomize=True)
@given(place=st.floats(0.0, 0.999), cut=st.integers(0, 9), put=st.binary(max_size=6))
def test_any_change_of_the_bytes_ends_in_a_verdict(good, place, cut, put):
    content = (good / "closure.onnx").read_bytes()
    start = int(place * len(content))
    found, checks = inspect_graph(content[:start] + put + content[start + cut :])
    assert (found is None) == (not checks[-1].passed)
    assert found is not None or checks[-1].rule in RULES


def test_an_operator_off_the_list_is_refused(model):
    for operator, domain in (("Expand", ""), ("Custom", "somewhere"), ("Scaler", "ai.onnx.ml")):
        hostile = onnx.ModelProto.FromString(model.SerializeToString())
        node = hostile.graph.node.add(op_type=operator, domain=domain)
        node.output.append("more")
        assert f"{operator} is not allowed" in refusal(hostile)


@pytest.mark.parametrize("operator", ["Loop", "If", "Scan"])
def test_a_subgraph_is_refused(model, operator):
    # A Loop that never ends is stopped by no public runtime.
    body = helper.make_graph([], "body", [], [])
    model.graph.node.append(helper.make_node(operator, [], ["more"], body=body))
    assert refusal(model) == "graph bytes: holds a subgraph"


def test_a_subgraph_hidden_in_an_allowed_operator_is_refused(model):
    body = helper.make_graph([], "body", [], [])
    node_of(model, "Add").attribute.append(helper.make_attribute("body", body))
    assert refusal(model) == "graph bytes: holds a subgraph"


def test_an_attribute_off_the_list_is_refused(model):
    node_of(model, "Add").attribute.append(helper.make_attribute("axis", 1))
    assert refusal(model) == "graph operators: Add with attribute axis"


def test_functions_training_and_sparse_constants_are_refused(model):
    for what, fill in (
        ("functions", lambda m: m.functions.add(name="f", domain="d")),
        ("training information", lambda m: m.training_info.add()),
        ("sparse constants", lambda m: m.graph.sparse_initializer.add()),
        ("quantisation", lambda m: m.graph.quantization_annotation.add()),
        ("declared shapes", lambda m: m.graph.value_info.add(name="v")),
    ):
        hostile = onnx.ModelProto.FromString(model.SerializeToString())
        fill(hostile)
        assert f"holds {what}" in refusal(hostile)


def test_other_versions_are_refused(model):
    model.ir_version = 11
    assert refusal(model) == "graph format: IR version 11, not 10"
    model.ir_version = 10
    model.opset_import.add(domain="somewhere", version=1)
    assert "operator sets" in refusal(model)


def test_data_outside_the_file_is_refused(model):
    tensor = model.graph.initializer[0]
    tensor.data_location = TensorProto.EXTERNAL
    tensor.external_data.add(key="location", value="closure.onnx")
    assert "lies outside the file" in refusal(model)


@pytest.mark.parametrize("value", [np.nan, np.inf])
def test_weights_that_are_not_finite_are_refused(model, value):
    weights = attribute_of(node_of(model, "TreeEnsemble"), "leaf_weights")
    changed = numpy_helper.to_array(weights.t).copy()
    changed[3] = value
    weights.t.CopyFrom(numpy_helper.from_array(changed))
    assert "not finite" in refusal(model)


def test_a_constant_that_lies_about_its_size_is_refused(model):
    model.graph.initializer[0].dims.append(10**9)
    assert "does not have the size it declares" in refusal(model)


def test_single_precision_constants_are_refused(model):
    tensor = model.graph.initializer[0]
    tensor.CopyFrom(numpy_helper.from_array(np.float32(1.0), tensor.name))
    assert "has type 1" in refusal(model)


def test_values_used_before_they_are_made_are_refused(model):
    last = model.graph.node[-1]
    model.graph.node[0].input[0] = last.output[0]
    assert "is not there yet" in refusal(model)


def test_a_value_made_twice_is_refused(model):
    model.graph.node[1].output[0] = model.graph.node[0].output[0]
    assert "is there already" in refusal(model)


def test_arrays_that_grow_without_bound_are_refused(model):
    name = model.graph.input[0].name
    for number in range(50):
        node = helper.make_node("Concat", [name, name], [f"grown_{number}"], axis=1)
        model.graph.node.append(node)
        name = f"grown_{number}"
    assert "graph shapes: grown_13 has shape" in refusal(model)


def test_broadcasting_among_constants_is_refused(model):
    wide = numpy_helper.from_array(np.zeros((1, 1000)), "wide")
    tall = numpy_helper.from_array(np.zeros((1000, 1)), "tall")
    model.graph.initializer.extend([wide, tall])
    model.graph.node.append(helper.make_node("Add", ["wide", "tall"], ["huge"]))
    assert "huge has shape [1000, 1000]" in refusal(model)


@pytest.mark.parametrize(
    ("name", "place", "value", "found"),
    [
        ("nodes_featureids", 0, 10**6, "nodes_featureids has an index out of range"),
        ("nodes_featureids", 0, -1, "nodes_featureids has an index out of range"),
        ("nodes_truenodeids", 0, 10**9, "nodes_truenodeids has an index out of range"),
        ("leaf_targetids", 0, 4, "leaf_targetids has an index out of range"),
        ("tree_roots", 0, -3, "tree_roots has an index out of range"),
        ("nodes_trueleafs", 0, 2, "nodes_trueleafs has a value other than"),
        ("tree_roots", 1, 0, "two ways to it, or none"),
    ],
)
def test_tree_indices_out_of_range_are_refused(model, name, place, value, found):
    attribute_of(node_of(model, "TreeEnsemble"), name).ints[place] = value
    assert found in refusal(model)


def tree(left, right, left_leaf, right_leaf, roots):
    count = len(left)
    return helper.make_node(
        "TreeEnsemble",
        ["x_velocity"],
        ["trees"],
        name="hostile",
        domain="ai.onnx.ml",
        n_targets=1,
        aggregate_function=1,
        post_transform=0,
        tree_roots=roots,
        nodes_featureids=[0] * count,
        nodes_splits=numpy_helper.from_array(np.zeros(count)),
        nodes_modes=numpy_helper.from_array(np.zeros(count, dtype=np.uint8)),
        nodes_missing_value_tracks_true=[0] * count,
        nodes_truenodeids=left,
        nodes_falsenodeids=right,
        nodes_trueleafs=left_leaf,
        nodes_falseleafs=right_leaf,
        leaf_targetids=[0],
        leaf_weights=numpy_helper.from_array(np.ones(1)),
    )


def test_tree_cycles_are_refused(model):
    plain = model.SerializeToString()
    hostile = {
        "a node that is its own child": tree([0], [0], [0], [1], [0]),
        "two nodes that are each other's child": tree([1, 0], [0, 0], [0, 0], [1, 1], [0]),
        "a cycle beside a sound tree": tree([0, 2, 1], [0] * 3, [1, 0, 0], [1, 1, 1], [0]),
        "a branch that joins another": tree([1, 0, 0], [1, 0, 0], [0, 1, 1], [0, 1, 1], [0]),
    }
    for node in hostile.values():
        changed = onnx.ModelProto.FromString(plain)
        changed.graph.node.append(node)
        assert refusal(changed).startswith("graph trees: hostile: ")


def test_trees_that_do_more_than_add_are_refused(model):
    attribute_of(node_of(model, "TreeEnsemble"), "post_transform").i = 2
    assert "does more than add leaf weights" in refusal(model)
