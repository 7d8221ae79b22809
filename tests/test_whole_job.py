"""The whole job through files and the command line, small but complete."""

from __future__ import annotations

import json
import shutil

import numpy as np
import pytest
import xarray as xr

from ensemble_files import QUICK, write_members, write_study
from ensemble_files import run_command as run
from learnclosure.simulate.exact import exact_plane_wave_tensor


def test_a_run_leaves_every_artefact(finished):
    results = finished / "results"
    for region in ("north", "south", "west"):
        assert (results / region / "statistics.nc").is_file()
        assert (results / region / "features.nc").is_file()
    for family in ("mean-field", "local-energy"):
        names = {path.name for path in (results / "bundle" / family).iterdir()}
        assert names - {"closure_float32.onnx"} == {
            "closure.onnx", "manifest.json", "reference.nc", "MODEL_CARD.md", "SHA256SUMS",
        }  # fmt: skip
    evaluation = json.loads((results / "evaluation.json").read_text())
    assert set(evaluation["families"]) == {"mean-field", "local-energy"}
    assert "west" in evaluation["families"]["mean-field"]["regions"]
    page = (results / "report.html").read_text()
    assert "west" in page


def test_a_second_run_keeps_what_stands(finished):
    results = finished / "results"
    before = {path: path.stat().st_mtime_ns for path in results.rglob("*") if path.is_file()}
    assert run("run", finished / "study.toml") == 0
    after = {path: path.stat().st_mtime_ns for path in results.rglob("*") if path.is_file()}
    assert after == before


def test_the_same_ensembles_give_the_same_bytes(finished, tmp_path):
    study = finished / "again.toml"
    study.write_text(
        (finished / "study.toml").read_text().replace('"results"', f'"{tmp_path / "again"}"')
    )
    assert run("run", study) == 0
    first, second = finished / "results", tmp_path / "again"
    for path in sorted(first.rglob("*")):
        if path.is_file() and path.suffix != ".joblib" and path.parent.name != "stages":
            other = second / path.relative_to(first)
            assert path.read_bytes() == other.read_bytes(), path.relative_to(first)


@pytest.mark.parametrize("family", ["mean-field", "local-energy"])
def test_a_bundle_verifies_until_one_byte_changes(finished, tmp_path, family, capsys):
    source = finished / "results" / "bundle" / family
    copy = tmp_path / "copy"
    copy.mkdir()
    for path in source.iterdir():
        (copy / path.name).write_bytes(path.read_bytes())
    assert run("verify", copy) == 0
    graph = bytearray((copy / "closure.onnx").read_bytes())
    graph[len(graph) // 2] ^= 1
    (copy / "closure.onnx").write_bytes(bytes(graph))
    assert run("verify", copy) == 1
    means = finished / "results" / "west" / "statistics.nc"
    capsys.readouterr()
    assert run("predict", copy, means, tmp_path / "tensor.nc") == 2
    assert "Traceback" not in capsys.readouterr().err
    assert not (tmp_path / "tensor.nc").exists()


def test_a_bundle_predicts_from_a_file_of_mean_fields(finished, tmp_path):
    bundle = finished / "results" / "bundle" / "local-energy"
    means = finished / "results" / "west" / "statistics.nc"
    assert run("predict", bundle, means, tmp_path / "tensor.nc") == 0
    with xr.open_dataset(tmp_path / "tensor.nc") as tensor:
        xx, yy = tensor["transport_tensor_xx"].values, tensor["transport_tensor_yy"].values
        off = 0.5 * (tensor["transport_tensor_xy"].values + tensor["transport_tensor_yx"].values)
        assert tensor["transport_tensor_xx"].attrs["units"] == "m2 s-1"
    smallest = 0.5 * (xx + yy) - np.hypot(0.5 * (xx - yy), off)
    assert smallest.min() >= 50.0 * (1 - 1e-9)


def test_an_export_packs_each_bundle_as_one_file_of_fixed_bytes(finished, tmp_path):
    copy = shutil.copytree(finished, tmp_path / "copy")
    packed = copy / "results" / "bundle" / "learnclosure-mean-field-0.1.0.zip"
    assert run("export", copy / "study.toml", "--archive") == 0
    assert run("verify", packed) == 0
    before = packed.read_bytes()
    assert run("export", copy / "study.toml", "--archive") == 0
    assert packed.read_bytes() == before
    assert run("compare", packed, copy / "results" / "bundle" / "mean-field") == 0


def test_one_region_alone_goes_from_inspect_to_bundle(tmp_path):
    write_members(tmp_path / "north", members=3, rows=16, columns=20)
    study = write_study(tmp_path, "north", extra=QUICK)
    assert run("inspect", study) == 0
    assert run("run", study) == 0
    assert run("verify", tmp_path / "results" / "bundle" / "mean-field") == 0
    evaluation = json.loads((tmp_path / "results" / "evaluation.json").read_text())
    assert evaluation["ceiling"]["north"] is None


def study_of_exact_ensemble(folder, kind):
    study = folder / "study.toml"
    study.write_text(
        f'output = "results"\n[[ensemble]]\nname = "{kind}"\nfiles = "{kind}/*.nc"\n'
        "[diagnosis]\ncoarsen = 1\nfloor = 0.0\nscalar_pull = 0.0\n"
    )
    return study


def test_the_plane_wave_tensor_comes_back_through_files_and_inversion(tmp_path):
    # Exact: Plumb 1979, J. Atmos. Sci. 36 (from memory); numbers a = .1, b = .05 m/s,
    # period 20 d, relaxation 50 d: Kxx 87.1881, Kxy 684.7741, Kyy 21.7970 m2/s.
    assert run("simulate", tmp_path, "--kind", "plane-wave") == 0
    assert run("diagnose", study_of_exact_ensemble(tmp_path, "plane-wave")) == 0
    with xr.open_dataset(tmp_path / "results" / "plane-wave" / "statistics.nc") as found:
        tensor = np.array([[found[f"transport_tensor_{a}{b}"].values for b in "xy"] for a in "xy"])
    exact = np.array([[87.1881, 684.7741], [-684.7741, 21.7970]])
    # Twelve equally spaced phases make sums over N exact; the diagnosis divides by N - 1.
    np.testing.assert_allclose(tensor[:, :, 0, 0, 0] * 11 / 12, exact, rtol=5e-6)
    np.testing.assert_allclose(exact_plane_wave_tensor(0.1, 0.05, 2 * np.pi / (20 * 86400.0),
        relaxation=1 / (50 * 86400.0)), exact, rtol=5e-6)  # fmt: skip


def expected_spinning(layer):
    """Ub = .1 m/s, relaxation 5e-6 1/s; T, Omega = 2e5, 2.5e-6 above and 1e5, 1e-5 below."""
    turning = ((2e5, 2.5e-6), (1e5, 1e-5))[layer]
    value = 0.1**2 / (1 / turning[0] + 5e-6 - 1j * turning[1])
    return np.array([[value.real, -value.imag], [value.imag, value.real]])


def test_the_spinning_tensor_comes_back_through_files_and_inversion(tmp_path):
    # Exact: Taylor 1921 with a turning velocity, S + i alpha = ub^2/(1/T + lambda - i Omega);
    # 941.18 and 235.29 m2/s above. Tolerance: four jackknife standard errors.
    assert expected_spinning(0)[0, 0] == pytest.approx(941.18, abs=0.005)
    assert expected_spinning(0)[1, 0] == pytest.approx(235.29, abs=0.005)
    assert run("simulate", tmp_path, "--kind", "spinning", "--members", 60,
               "--snapshots", 20) == 0  # fmt: skip
    assert run("diagnose", study_of_exact_ensemble(tmp_path, "spinning")) == 0
    with xr.open_dataset(tmp_path / "results" / "spinning" / "statistics.nc") as found:
        for layer in range(found.sizes["layer"]):
            for pair in ("xx", "xy", "yx", "yy"):
                value = float(found[f"transport_tensor_{pair}"][layer, 0, 0])
                error = float(found[f"transport_tensor_{pair}_standard_error"][layer, 0, 0])
                exact = expected_spinning(layer)["xy".index(pair[0])]["xy".index(pair[1])]
                assert abs(value - exact) < 4 * error, (layer, pair)
