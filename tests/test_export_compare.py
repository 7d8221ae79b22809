"""Telling bundles apart: labels, declarations and outputs differ, rounding and speed do not."""

from __future__ import annotations

import json
import shutil

import pytest

from export_cases import export
from hostile_bundles import renew_sums
from learnclosure.cli import main
from learnclosure.errors import BundleError
from learnclosure.export.compare import compare_bundles
from learnclosure.study import ExportSettings

SCORES = {"amber": {"scores": {"flux_r2": [0.5, 0.6], "divergence_r2": [0.1, None]}}}


def scored(regions, family="local-energy"):
    return {"families": {family: {"regions": regions}}}


@pytest.fixture(scope="module")
def bundles(tmp_path_factory):
    folder = tmp_path_factory.mktemp("compared")
    export(folder / "ridge", regressor="ridge", evaluation=scored(SCORES))
    export(folder / "trees", regressor="extra-trees", evaluation=scored(SCORES))
    export(folder / "mean", "mean-field", "ridge")
    newer = ExportSettings(version="0.2.0", licence="MIT")
    export(folder / "newer", regressor="ridge", evaluation=scored(SCORES), settings=newer)
    return folder


def leave(arguments, capsys):
    with pytest.raises(SystemExit) as caught:
        main([str(word) for word in arguments])
    return caught.value.code, capsys.readouterr()


def test_a_bundle_does_not_differ_from_itself(bundles):
    comparison = compare_bundles(bundles / "ridge", bundles / "ridge")
    assert not comparison.differs
    assert comparison.differences == ()
    assert max(comparison.outputs.values()) <= 1e-12
    assert comparison.speed_ratio > 0.0


def test_labels_are_told_but_make_no_difference(bundles):
    comparison = compare_bundles(bundles / "ridge", bundles / "newer")
    assert {(row.name, row.first, row.second) for row in comparison.differences} == {
        ("version", "0.1.0", "0.2.0"),
        ("licence", "CC-BY-4.0", "MIT"),
    }
    assert not comparison.differs


def test_another_regressor_gives_other_outputs(bundles):
    comparison = compare_bundles(bundles / "ridge", bundles / "trees")
    assert comparison.differs
    assert {row.topic for row in comparison.differences} == {"label", "output"}
    assert comparison.outputs["transport_tensor_xx"] > 1e-3


def test_other_inputs_are_told_and_outputs_compared_only_where_they_can_be(bundles):
    forth = compare_bundles(bundles / "ridge", bundles / "mean")
    told = [row for row in forth.differences if row.name == "eddy_kinetic_energy"]
    assert [(row.topic, row.first, row.second) for row in told] == [
        ("input", "eddy_kinetic_energy", None)
    ]
    assert forth.outputs
    back = compare_bundles(bundles / "mean", bundles / "ridge")
    assert back.outputs == {}
    assert back.differs


def test_scores_differ_only_beyond_rounding(bundles, tmp_path):
    for value, names in ((0.6 + 1e-12, []), (0.61, ["amber flux_r2 layer 1"])):
        copy = shutil.copytree(bundles / "ridge", tmp_path / str(value))
        manifest = json.loads((copy / "manifest.json").read_text())
        regions = manifest["evaluation"]["closure"]["regions"]
        regions["amber"]["scores"]["flux_r2"][1] = value
        (copy / "manifest.json").write_text(json.dumps(manifest))
        renew_sums(copy)
        comparison = compare_bundles(bundles / "ridge", copy)
        assert [row.name for row in comparison.differences if row.topic == "score"] == names
        assert comparison.differs is bool(names)


def test_the_command_ends_with_0_or_1_and_writes_json(bundles, capsys):
    code, text = leave(["compare", bundles / "ridge", bundles / "newer"], capsys)
    assert (code, "0.2.0" in text.out) == (0, True)
    code, text = leave(["compare", bundles / "ridge", bundles / "trees", "--json"], capsys)
    assert code == 1
    assert "the bundles differ in outputs" in text.err
    record = json.loads(text.out)
    assert record["differs"]
    assert record["output_limit"] == 1e-12
    assert len(record["seconds_per_point"]) == 2


def test_a_bundle_that_fails_its_gate_is_not_compared(bundles, tmp_path):
    copy = shutil.copytree(bundles / "ridge", tmp_path / "copy")
    (copy / "MODEL_CARD.md").write_text("other")
    with pytest.raises(BundleError, match="rule sums"):
        compare_bundles(bundles / "ridge", copy)
