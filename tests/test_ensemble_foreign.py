"""Files of an ocean model nobody here formatted, read by naming their variables in a study.

The truth is a plain h5py and NumPy computation from what the files' makers document:
u on the east and v on the north face of a cell, index 0 at the bottom, -1e18 on land.
"""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

from learnclosure.ensemble.reader import open_ensemble
from learnclosure.ensemble.readiness import inspect_ensemble
from learnclosure.study import read_study

HERE = Path(__file__).parent
STUDY = HERE.parent / "experiments" / "foreign_fixture" / "study.toml"
FILES = sorted((HERE / "data" / "foreign").glob("channel_m*.snapshot.nc"))
LAND = -1e18


@pytest.fixture(scope="module")
def study():
    return read_study(STUDY)


@pytest.fixture(scope="module")
def ensemble(study):
    with open_ensemble(study.ensembles[0], study.folder) as opened:
        yield opened


def raw(name, time):
    """All members of one variable at one time, the top layer first, NaN on land."""
    members = []
    for path in FILES:
        with h5py.File(path) as file:
            values = file[name][time][::-1]
        members.append(np.where(values == LAND, np.nan, values))
    return np.stack(members)


@pytest.mark.parametrize("time", [0, 1])
def test_tracers_are_those_of_the_files(ensemble, time):
    fields = ensemble.fields(time)
    for name in ("salt", "trc_a", "trc_b", "trc_c"):
        np.testing.assert_array_equal(fields[name], np.nan_to_num(raw(name, time), nan=0.0))


@pytest.mark.parametrize("time", [0, 1])
def test_velocities_are_means_of_two_faces_with_nothing_through_land(ensemble, time):
    fields = ensemble.fields(time)
    east, north = np.nan_to_num(raw("u", time)), np.nan_to_num(raw("v", time))
    sea = np.isfinite(raw("salt", time))
    zonal, meridional = np.zeros_like(east), np.zeros_like(north)
    rows, columns = east.shape[-2:]
    for j in range(rows):
        for i in range(columns):
            west_face = east[..., j, i - 1]  # index -1 closes the re-entrant channel
            south_face = north[..., j - 1, i] if j > 0 else 0.0
            zonal[..., j, i] = (west_face + east[..., j, i]) / 2
            meridional[..., j, i] = (south_face + north[..., j, i]) / 2
    np.testing.assert_allclose(fields["x_velocity"], np.where(sea, zonal, 0.0), rtol=1e-15)
    np.testing.assert_allclose(fields["y_velocity"], np.where(sea, meridional, 0.0), rtol=1e-15)


def test_buoyancy_follows_from_temperature_by_the_linear_equation(ensemble):
    expected = 9.81 * 2e-4 * np.nan_to_num(raw("temp", 1), nan=0.0)
    np.testing.assert_allclose(ensemble.fields(1)["buoyancy"], expected, rtol=0, atol=1e-15)


def test_the_grid_is_that_of_the_files(ensemble):
    with h5py.File(FILES[0]) as file:
        bottom = file["kbot"][:]
        thickness, depth = file["dzt"][:][::-1], file["ht"][:]
        y = 1e3 * file["yt"][:]
        times = file["Time"][:]
    grid = ensemble.grid
    layers, _, columns = grid.shape
    # kbot counts the deepest cell from 1 at the bottom; what is not positive is land.
    from_bottom = layers - np.arange(layers)[:, None, None]
    sea = (bottom > 0) & (from_bottom >= bottom)
    np.testing.assert_array_equal(grid.geometry.mask, sea)
    np.testing.assert_array_equal(
        grid.layer_thickness, np.where(sea, thickness[:, None, None], 0.0)
    )
    np.testing.assert_array_equal(grid.sea_floor_depth, np.where(sea.any(axis=0), depth, 0.0))
    np.testing.assert_allclose(grid.y, y, rtol=1e-15)
    np.testing.assert_allclose(
        grid.coriolis_parameter, (0.8e-4 + 2e-11 * y)[:, None] * np.ones(columns), rtol=1e-15
    )
    np.testing.assert_array_equal(grid.planetary_beta_y, 2e-11)
    np.testing.assert_array_equal(grid.geometry.dx, 20e3)
    assert (grid.geometry.periodic_x, grid.geometry.periodic_y) == (True, False)
    assert grid.vertical == "levels"
    np.testing.assert_array_equal(ensemble.times, times)


def test_members_go_by_their_file_names_since_nothing_else_tells_them(ensemble):
    assert ensemble.member_labels == tuple(path.stem for path in FILES)


def test_inspection_finds_the_study_ready_and_shows_the_units(study):
    readiness = inspect_ensemble(study.ensembles[0], study.folder)
    assert readiness.ready, readiness.problems
    lines = {line.variable: line for line in readiness.roles}
    assert (lines["u"].units_before, lines["u"].units_after) == ("m/s", "m s-1")
    assert (lines["temp"].units_before, lines["temp"].units_after) == ("deg C", "K")
    assert lines["trc_a"].units_after == "1"
    assert (lines["u"].place, lines["v"].place) == ("east", "north")
    assert "3 (" in readiness.facts["members"]
    assert any("fewer than four" in text for text in readiness.missing)


def test_without_its_faces_the_study_is_refused(study):
    table = study.ensembles[0]
    centred = table.model_copy(update={"grid": table.grid.model_copy(update={"faces": {}})})
    readiness = inspect_ensemble(centred, study.folder)
    assert not readiness.ready
    assert "name faces" in readiness.problems[0]
    assert any(text.startswith("u (Time 2, zt 3, yt 14, xu 18)") for text in readiness.variables)
