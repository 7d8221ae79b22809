import os
import subprocess
import sys

import h5netcdf
import numpy as np
import pytest
import xarray as xr

from closures_cases import mean_state
from export_cases import closure, export
from learnclosure.delivery import predict_region
from learnclosure.errors import BundleError, InputError, RoleError, SourceError, UnitError
from learnclosure.export.predictor import load_predictor, predict_file
from learnclosure.quantities import MEAN_STATE, OUTPUTS

BLOCKED = {
    *("cf_xarray", "dask", "gsw", "joblib", "matplotlib", "numba", "pandas", "pint"),
    *("pydantic", "scipy", "sklearn", "xarray", "zarr"),
}


@pytest.fixture(scope="module")
def bundles(tmp_path_factory):
    folder = tmp_path_factory.mktemp("bundles")
    return {
        "local-energy": export(folder / "local-energy", regressor="extra-trees"),
        "mean-field": export(folder / "mean-field", "mean-field", "ridge"),
    }


@pytest.fixture
def means():
    """Return the mean state of a channel with an island, as a host would write it."""
    state = mean_state("maple", 0.35, 70e3, 350.0)
    for name, quantity in MEAN_STATE.items():
        state[name].attrs["units"] = quantity.units
    state["wet_share"][:, 5:8, 10:13] = 0.0
    for name in ("x_velocity", "y_velocity", "layer_thickness", "eddy_kinetic_energy"):
        state[name][:, 5:8, 10:13] = np.nan
    return state


def write(state, path):
    state.to_netcdf(path, engine="h5netcdf")
    return path


@pytest.mark.parametrize(
    ("family", "regressor"), [("local-energy", "extra-trees"), ("mean-field", "ridge")]
)
def test_a_file_of_mean_fields_gives_what_the_closure_predicts(
    bundles, means, tmp_path, family, regressor
):
    predict_file(bundles[family], write(means, tmp_path / "means.nc"), tmp_path / "out.nc")
    expected = predict_region(closure(family, regressor), means)
    with xr.open_dataset(tmp_path / "out.nc", engine="h5netcdf") as out:
        assert set(out.data_vars) == set(OUTPUTS)
        for name, row in OUTPUTS.items():
            values, truth = out[name].values, expected[name]
            assert np.array_equal(np.isnan(values), np.isnan(truth))
            assert np.nanmax(np.abs(values - truth)) <= 1e-12 * max(np.nanstd(truth), 1.0)
            assert out[name].attrs["units"] == row.units
            assert out[name].attrs["long_name"] == row.long_name
        assert np.isnan(out["trust"].values).sum() == 2 * 9
        assert out.attrs["Conventions"] == "CF-1.11"
        assert out.attrs["family"] == family
        assert out.attrs["periodic"] == "x"
        assert np.array_equal(out["x"], means["x"])
        assert out["y"].attrs["standard_name"] == "projection_y_coordinate"


def test_the_same_fields_give_the_same_bytes(bundles, means, tmp_path):
    source = write(means, tmp_path / "means.nc")
    for name in ("one.nc", "two.nc"):
        predict_file(bundles["mean-field"], source, tmp_path / name)
    assert (tmp_path / "one.nc").read_bytes() == (tmp_path / "two.nc").read_bytes()


def test_packed_fields_are_unpacked(bundles, means, tmp_path):
    predict_file(bundles["mean-field"], write(means, tmp_path / "means.nc"), tmp_path / "plain.nc")
    packing = {"dtype": "i4", "scale_factor": 1e-9, "add_offset": 0.1, "_FillValue": -(2**31)}
    means.to_netcdf(tmp_path / "packed.nc", engine="h5netcdf", encoding={"x_velocity": packing})
    predict_file(bundles["mean-field"], tmp_path / "packed.nc", tmp_path / "out.nc")
    with (
        xr.open_dataset(tmp_path / "plain.nc", engine="h5netcdf") as plain,
        xr.open_dataset(tmp_path / "out.nc", engine="h5netcdf") as out,
    ):
        close = np.isclose(
            out["transport_tensor_yy"], plain["transport_tensor_yy"], rtol=1e-3, equal_nan=True
        )
        assert close.all()


def test_missing_mean_fields_are_listed_in_one_sentence(bundles, means, tmp_path):
    source = write(means.drop_vars(["y_velocity", "sea_floor_depth"]), tmp_path / "means.nc")
    with pytest.raises(
        RoleError, match=r"mean fields are missing: y_velocity, sea_floor_depth \(found .*; add"
    ):
        predict_file(bundles["mean-field"], source, tmp_path / "out.nc")
    assert not (tmp_path / "out.nc").exists()


def test_eddy_energy_is_asked_for_only_where_it_is_used(bundles, means, tmp_path):
    source = write(means.drop_vars("eddy_kinetic_energy"), tmp_path / "means.nc")
    predict_file(bundles["mean-field"], source, tmp_path / "out.nc")
    with pytest.raises(RoleError, match="missing: eddy_kinetic_energy"):
        predict_file(bundles["local-energy"], source, tmp_path / "other.nc")


@pytest.mark.parametrize("spelling", ["m s-1", "m/s", "m s^-1", "m.s-1", "m s**-1"])
def test_ways_to_write_one_unit_are_understood(bundles, means, tmp_path, spelling):
    means["x_velocity"].attrs["units"] = spelling
    predict_file(bundles["mean-field"], write(means, tmp_path / "means.nc"), tmp_path / "out.nc")


def test_other_units_are_refused(bundles, means, tmp_path):
    means["cell_width_x"].attrs["units"] = "km"
    source = write(means, tmp_path / "means.nc")
    with pytest.raises(UnitError, match=r"cell_width_x: is not in SI units \(found km, expected m"):
        predict_file(bundles["mean-field"], source, tmp_path / "out.nc")
    del means["cell_width_x"].attrs["units"]
    source = write(means, tmp_path / "other.nc")
    with pytest.raises(UnitError, match="cell_width_x: has no units"):
        predict_file(bundles["mean-field"], source, tmp_path / "out.nc")


def test_gaps_where_there_is_sea_are_refused(bundles, means, tmp_path):
    means["x_velocity"][1, 2, 3] = np.nan
    source = write(means, tmp_path / "means.nc")
    with pytest.raises(RoleError, match=r"x_velocity: values are missing .*found 1 cells"):
        predict_file(bundles["mean-field"], source, tmp_path / "out.nc")


def test_a_world_without_sea_is_refused(bundles, means, tmp_path):
    means["wet_share"][:] = 0.0
    source = write(means, tmp_path / "means.nc")
    with pytest.raises(RoleError, match="there is no sea"):
        predict_file(bundles["mean-field"], source, tmp_path / "out.nc")


def test_sources_that_cannot_be_read_are_refused(bundles, tmp_path):
    with pytest.raises(SourceError, match=r"nothing\.nc: does not exist"):
        predict_file(bundles["mean-field"], tmp_path / "nothing.nc", tmp_path / "out.nc")
    (tmp_path / "corrupt.nc").write_bytes(b"\x89HDF\r\n\x1a\n" + bytes(200))
    with pytest.raises(SourceError, match=r"corrupt\.nc: cannot be read as a NetCDF-4 file"):
        predict_file(bundles["mean-field"], tmp_path / "corrupt.nc", tmp_path / "out.nc")


def test_a_source_that_is_no_bundle_is_refused(means, tmp_path):
    with pytest.raises(BundleError, match="is not a folder"):
        predict_file(tmp_path / "x", write(means, tmp_path / "means.nc"), tmp_path / "out.nc")


def test_a_predictor_keeps_the_shape_it_is_given(bundles):
    predictor = load_predictor(bundles["local-energy"])
    with h5netcdf.File(bundles["local-energy"] / "reference.nc", "r") as file:
        inputs = {name: np.asarray(file.variables[name][:12]) for name in predictor.inputs}
        trust = np.asarray(file.variables["trust"][:12])
    assert predictor.uses_energy
    assert not load_predictor(bundles["mean-field"]).uses_energy
    outputs = predictor({name: values.reshape(3, 4) for name, values in inputs.items()})
    assert tuple(outputs) == predictor.outputs
    assert np.array_equal(outputs["trust"], trust.reshape(3, 4))
    single = predictor({name: values[0] for name, values in inputs.items()})
    assert single["trust"].shape == ()


def test_inputs_a_predictor_cannot_use_are_refused(bundles):
    predictor = load_predictor(bundles["mean-field"])
    inputs = {name: np.ones(5) for name in predictor.inputs}
    first, second = predictor.inputs[0], predictor.inputs[-1]
    with pytest.raises(InputError, match=f"{second}: a closure input has the wrong shape"):
        predictor(inputs | {second: np.ones(4)})
    with pytest.raises(InputError, match=f"{second}: a closure input holds values that are not"):
        predictor(inputs | {second: np.array([1.0, 1.0, np.nan, 1.0, 1.0])})
    for name in (first, second):
        without = {key: values for key, values in inputs.items() if key != name}
        with pytest.raises(InputError, match=f"{name}: a closure input is missing"):
            predictor(without)


RECEIVER = """
import os
import sys

blocked = set(sys.argv[1].split())


class Blocker:
    def find_spec(self, name, path=None, target=None):
        if name.split(".")[0] in blocked:
            raise ImportError(f"blocked: {name}")


sys.meta_path.insert(0, Blocker())
from learnclosure.export.gate import verify_bundle
from learnclosure.export.predictor import predict_file

outcome = verify_bundle(sys.argv[2])
assert outcome.passed, outcome
predict_file(*sys.argv[2:5])
assert os.environ["ORT_DISABLE_TELEMETRY"] == "1"
assert not {name.split(".")[0] for name in sys.modules} & blocked
"""


def test_a_receiver_needs_only_a_few_libraries_and_leaves_no_trace_at_home(
    bundles, means, tmp_path
):
    source = write(means, tmp_path / "means.nc")
    home = tmp_path / "home"
    home.mkdir()
    # Builds of onnxruntime that report usage write a queue below the home folder.
    environment = {key: value for key, value in os.environ.items() if not key.startswith("ORT_")}
    arguments = [" ".join(sorted(BLOCKED)), bundles["local-energy"], source, tmp_path / "out.nc"]
    subprocess.run(
        [sys.executable, "-c", RECEIVER, *map(str, arguments)],
        check=True,
        env=environment | {"HOME": str(home), "PYTHONDONTWRITEBYTECODE": "1"},
    )
    assert (tmp_path / "out.nc").is_file()
    assert not list(home.rglob("*"))
