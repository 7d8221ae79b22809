"""Part of the rows of an ensemble, read as if the files held no others."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from ensemble_files import member_dataset
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.study import EnsembleTable, read_study

DIMS = ("time", "layer", "y", "x")


def write_staggered(folder, *, periodic, outer):
    """Write members whose velocities sit on faces, one more than cells if ``outer``."""
    for number in range(3):
        dataset = member_dataset(number, rows=12, columns=6)
        dataset.attrs["periodic"] = "y" if periodic else ""
        random = np.random.default_rng(number)
        rows = 12 + outer
        v = random.normal(size=(3, 2, rows, 6))
        if periodic and outer:
            v[..., -1, :] = v[..., 0, :]
        elif not periodic:
            v[..., -1, :] = 0.0
            v[..., 0, :] *= not outer
        units = {"units": "m s-1", "standard_name": "sea_water_y_velocity"}
        dims = ("time", "layer", "y_face" if outer else "y", "x")
        dataset = dataset.drop_vars("y_velocity").assign(y_velocity=(dims, v, units))
        dataset["dye_a"].attrs["units"] = "degC"
        dataset.to_netcdf(folder / f"member_{number}.nc", engine="h5netcdf")
    return EnsembleTable(name="north", files="*.nc", grid={"faces": {"y_velocity": "north"}})


@pytest.mark.parametrize("outer", [False, True])
@pytest.mark.parametrize("periodic", [False, True])
def test_rows_are_those_of_the_whole(tmp_path, periodic, outer):
    table = write_staggered(tmp_path, periodic=periodic, outer=outer)
    with open_ensemble(table, tmp_path) as ensemble:
        whole = ensemble.fields(1)
        for rows in (slice(0, 4), slice(4, 8), slice(8, 12), slice(0, 12)):
            part = ensemble.fields_of(1, slice(0, 2), rows)
            assert part.keys() == whole.keys()
            for name, values in part.items():
                np.testing.assert_array_equal(values, whole[name][:2, :, rows])


def test_numbers_keep_their_precision_until_they_must_change(tmp_path):
    table = write_staggered(tmp_path, periodic=False, outer=False)
    with open_ensemble(table, tmp_path) as ensemble:
        part = ensemble.fields_of(0, slice(None), slice(0, 4))
        kinds = {name: values.dtype for name, values in part.items()}
        assert kinds["dye_b"] == np.float32
        assert kinds["dye_a"] == kinds["y_velocity"] == np.float64
        assert all(values.dtype == np.float64 for values in ensemble.fields(0).values())


def test_rows_of_files_of_another_model_with_buoyancy():
    # Velocities on faces, the top layer last, buoyancy by an equation of state, land.
    study = read_study(Path(__file__).parent.parent / "experiments/foreign_fixture/study.toml")
    with open_ensemble(study.ensembles[0], study.folder) as ensemble:
        assert ensemble.has_buoyancy
        whole, count = ensemble.fields(1), ensemble.grid.shape[1]
        middle = count // 2
        sea = ensemble.grid.geometry.mask
        for rows in (slice(0, middle), slice(middle, count)):
            part = ensemble.fields_of(1, slice(None), rows)
            assert part.keys() == whole.keys()
            for name, values in part.items():
                wet = np.where(sea[:, rows], values, 0.0)
                np.testing.assert_array_equal(wet, whole[name][:, :, rows])


def test_rows_of_layers_of_varying_thickness(tmp_path):
    for number in range(2):
        dataset = member_dataset(number, rows=12, columns=6)
        random = np.random.default_rng(number)
        thickness = np.array([1000.0, 3000.0])[:, None, None] + random.normal(size=(3, 2, 12, 6))
        dataset["thickness"] = (DIMS, thickness.astype(np.float32), {"units": "m"})
        dataset.to_netcdf(tmp_path / f"member_{number}.nc", engine="h5netcdf")
    table = EnsembleTable(name="north", files="*.nc", variables={"thickness": "thickness"})
    with open_ensemble(table, tmp_path) as ensemble:
        whole = ensemble.fields(2)
        assert "interface_height" in whole
        for rows in (slice(0, 4), slice(4, 12)):
            for name, values in ensemble.fields_of(2, slice(None), rows).items():
                np.testing.assert_array_equal(values, whole[name][:, :, rows])
