import dataclasses
import json
import re
import subprocess

import h5netcdf
import numpy as np
import pytest

from export_cases import closure, export, table
from learnclosure.errors import BundleError, CheckFailedError, OutputError
from learnclosure.export import bundle
from learnclosure.export.gate import verify_bundle
from learnclosure.export.layout import LARGEST_SIZES
from learnclosure.export.reference import largest_difference
from learnclosure.quantities import FEATURES, INPUTS, OUTPUTS


@pytest.fixture(scope="module")
def shipped(tmp_path_factory):
    return export(tmp_path_factory.mktemp("shipped") / "bundle")


@pytest.fixture(scope="module")
def manifest(shipped):
    return json.loads((shipped / "manifest.json").read_text())


def test_a_bundle_has_its_files_and_passes_its_gate(shipped):
    names = {path.name for path in shipped.iterdir()}
    assert names == {*LARGEST_SIZES, "closure_float32.onnx"}
    outcome = verify_bundle(shipped)
    assert outcome.passed
    assert [check.name for check in outcome.checks] == [
        "files",
        "sums",
        "schema",
        "graph bytes",
        "graph format",
        "graph operators",
        "graph constants",
        "graph connections",
        "graph shapes",
        "graph trees",
        "manifest form",
        "declared inputs",
        "declared outputs",
        "single precision graph",
        "reference points",
        "reference outputs",
        "single precision",
    ]


def test_the_sums_are_understood_by_the_standard_tool(shipped):
    done = subprocess.run(
        ["sha256sum", "-c", "--strict", "SHA256SUMS"], cwd=shipped, capture_output=True, check=True
    )
    assert done.stdout.count(b": OK") == 5


def test_the_same_closure_gives_the_same_bytes(shipped, tmp_path):
    again = export(tmp_path / "again")
    for path in shipped.iterdir():
        assert path.read_bytes() == (again / path.name).read_bytes(), path.name


def test_the_manifest_tells_units_symmetry_and_locality_of_every_input(manifest):
    fitted = closure("local-energy", "ridge")
    assert [row["name"] for row in manifest["inputs"]] == list(fitted.inputs_)
    for row in manifest["inputs"]:
        quantity = INPUTS[row["name"]]
        assert (row["units"], row["parity"], row["locality"]) == (
            quantity.units,
            quantity.parity,
            quantity.locality,
        )
        low, high = row["range_in_regions"]
        assert low <= high
    assert [row["name"] for row in manifest["outputs"]] == list(OUTPUTS)


def test_the_manifest_tells_the_trained_range_of_every_feature(manifest):
    ranges = closure("local-energy", "ridge").guard_.ranges()
    for row in manifest["features"]:
        assert tuple(row["trained_range"]) == ranges[row["name"]]
        assert row["units"] == FEATURES[row["name"]].units


def test_the_manifest_carries_provenance_scores_and_half_widths(manifest):
    assert manifest["training"]["regions"] == [{"name": "amber"}]
    assert manifest["evaluation"]["closure"] == {"chosen": {"regressor": "ridge"}}
    assert manifest["half_width"]["multipliers"]["nn"] == 0.5
    assert manifest["fallback"]["name"] == "eke-mixing-length"
    assert (manifest["version"], manifest["licence"]) == ("0.1.0", "CC-BY-4.0")
    assert max(manifest["agreement"].values()) < 1e-13


def test_reference_points_hold_what_the_closure_itself_predicts(shipped):
    fitted = closure("local-energy", "ridge")
    with h5netcdf.File(shipped / "reference.nc", "r") as file:
        columns = {name: np.asarray(variable[...]) for name, variable in file.variables.items()}
        units = {name: variable.attrs["units"] for name, variable in file.variables.items()}
        assert file.attrs["Conventions"] == "CF-1.11"
    prediction = fitted.predict({name: columns[name] for name in fitted.inputs_})
    assert np.array_equal(columns["transport_tensor_xy"], prediction.tensor[:, 1])
    assert np.array_equal(columns["half_width_yy"], prediction.half_width[:, 3])
    assert np.array_equal(columns["trust"], prediction.trust)
    assert units["transport_tensor_xy"] == "m2 s-1"
    assert columns["trust"].min() == 0.0  # points far outside are among them
    assert columns["trust"].max() == 1.0
    assert (columns["pv_gradient_x"] == 0.0).any()
    assert columns["coriolis_parameter"].min() < 0.0 < columns["coriolis_parameter"].max()


def test_a_graph_that_disagrees_is_not_shipped(tmp_path, monkeypatch):
    def twisted(fitted, metadata):
        other = closure("local-energy", "ridge")
        changed = dataclasses.replace(
            other.half_widths_, multipliers=other.half_widths_.multipliers * (1.0 + 1e-10)
        )
        twin = object.__new__(type(other))
        twin.__dict__.update(other.__dict__, half_widths_=changed)
        return build(twin, metadata)

    build = bundle.build_graph
    monkeypatch.setattr(bundle, "build_graph", twisted)
    with pytest.raises(CheckFailedError, match=r"closure and onnxruntime disagree \(found .*e-1"):
        export(tmp_path / "bundle")
    assert not list(tmp_path.iterdir())


def test_a_failing_export_keeps_the_bundle_that_stands(tmp_path):
    export(tmp_path / "bundle")
    before = (tmp_path / "bundle" / "SHA256SUMS").read_bytes()

    def broken(manifest):
        raise OSError(28, "No space left on device")

    with pytest.raises(OSError, match="No space"):
        export(tmp_path / "bundle", render_card=broken)
    assert (tmp_path / "bundle" / "SHA256SUMS").read_bytes() == before
    assert [path.name for path in tmp_path.iterdir()] == ["bundle"]


def test_reference_points_must_cover_every_input(tmp_path):
    points = {k: v for k, v in table("local-energy").inputs.items() if k != "jet_width"}
    points.pop("eady_growth_rate")
    with pytest.raises(BundleError, match=r"no reference points .*found eady_growth_rate"):
        export(tmp_path / "bundle", reference_inputs=points)
    with pytest.raises(BundleError, match="there are no reference points"):
        export(
            tmp_path / "bundle",
            reference_inputs={k: v[:0] for k, v in table("local-energy").inputs.items()},
        )


def test_a_folder_that_cannot_be_made_is_refused(tmp_path):
    (tmp_path / "file").write_text("in the way")
    with pytest.raises(OutputError, match=re.escape(str(tmp_path / "file"))):
        export(tmp_path / "file" / "bundle")


def test_differences_are_taken_over_the_spread_of_each_output():
    truth = {"a": np.array([0.0, 2.0]), "b": np.array([1e6, 3e6])}
    found = {"a": np.array([0.0, 2.5]), "b": np.array([1e6, 3e6 + 1.0])}
    assert largest_difference(found, truth) == (0.5, "a")
    assert largest_difference(truth, truth)[0] == 0.0


def test_a_value_that_is_not_finite_is_never_in_agreement():
    truth = {"a": np.array([1.0, np.nan])}
    assert largest_difference(truth, truth)[0] == np.inf
    assert (
        largest_difference({"a": np.array([np.inf, 1.0])}, {"a": np.array([1.0, 1.0])})[0] == np.inf
    )
    assert largest_difference({"a": np.zeros(2)}, {"a": np.zeros(3)})[0] == np.inf
    assert largest_difference({"a": np.zeros(0)}, {"a": np.zeros(0)})[0] == np.inf
