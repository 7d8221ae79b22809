"""Faces, spacing, rotation and vertical cells as files and studies tell them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ensemble_cases import each, write_classic
from learnclosure.ensemble.axes import Cells, between_cells, to_centres
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.errors import SourceError
from learnclosure.study import EnsembleTable

# Published constants: WGS 84 rotation rate; mean radius of the Earth (IUGG), to 1e-5.
EARTH_ROTATION = 7.292115e-5
EARTH_RADIUS = 6.3710e6


def opened(folder, change=None, grid=None, **more):
    write_classic(folder, members=2, change=change, **more)
    return open_ensemble(EnsembleTable(name="north", files="*.nc", grid=grid or {}), folder)


def in_kilometres(dataset):
    for axis in "xy":
        attributes = {"units": "km", "axis": axis.upper()}
        dataset = dataset.assign_coords({axis: (axis, dataset[axis].values / 1e3, attributes)})
    return dataset


def on_a_sphere(dataset, south=40.0):
    dataset = dataset.drop_vars(["coriolis_parameter"])
    del dataset.attrs["planetary_beta"]
    longitude = (350.0 + 0.25 * np.arange(dataset.sizes["x"])) % 360.0
    latitude = south + 0.2 * np.arange(dataset.sizes["y"])
    return dataset.assign_coords(
        x=("x", longitude, {"units": "degrees_east", "standard_name": "longitude"}),
        y=("y", latitude, {"units": "degrees_north", "standard_name": "latitude"}),
    )


def test_kilometres_and_metres_are_one(tmp_path):
    with opened(tmp_path / "m") as metres, opened(tmp_path / "km", each(in_kilometres)) as km:
        np.testing.assert_allclose(km.grid.x, metres.grid.x, rtol=1e-15)
        np.testing.assert_allclose(km.grid.geometry.dx, metres.grid.geometry.dx, rtol=1e-14)
        np.testing.assert_allclose(km.grid.geometry.dy, metres.grid.geometry.dy, rtol=1e-14)
        for name, values in metres.fields(2).items():
            np.testing.assert_array_equal(km.fields(2)[name], values)


def test_degrees_become_metres_on_a_sphere(tmp_path):
    with opened(tmp_path, each(on_a_sphere)) as ensemble:
        grid = ensemble.grid
    latitude = np.radians(40.0 + 0.2 * np.arange(12))[:, None] * np.ones(16)
    one_degree = EARTH_RADIUS * np.pi / 180.0
    np.testing.assert_allclose(grid.geometry.dy, 0.2 * one_degree, rtol=1e-10)
    np.testing.assert_allclose(
        grid.geometry.dx, 0.25 * one_degree * np.cos(latitude), rtol=1e-10
    )  # although the longitudes pass 360
    np.testing.assert_allclose(
        grid.coriolis_parameter, 2 * EARTH_ROTATION * np.sin(latitude), rtol=1e-12
    )
    np.testing.assert_allclose(
        grid.planetary_beta_y, 2 * EARTH_ROTATION * np.cos(latitude) / EARTH_RADIUS, rtol=1e-12
    )
    np.testing.assert_array_equal(grid.planetary_beta_x, 0.0)


def test_southern_latitudes_turn_the_other_way(tmp_path):
    with opened(tmp_path, each(lambda dataset: on_a_sphere(dataset, -42.0))) as ensemble:
        assert (ensemble.grid.coriolis_parameter < 0).all()
        assert (ensemble.grid.planetary_beta_y > 0).all()


def test_the_study_gives_a_beta_plane(tmp_path):
    with opened(tmp_path, grid={"coriolis": -1e-4, "beta": 1.5e-11}) as ensemble:
        grid = ensemble.grid
    expected = (-1e-4 + 1.5e-11 * grid.y)[:, None] * np.ones(16)
    np.testing.assert_allclose(grid.coriolis_parameter, expected, rtol=1e-15)
    np.testing.assert_array_equal(grid.planetary_beta_y, 1.5e-11)


def test_beta_of_a_coriolis_field_is_its_gradient_along_both_axes(tmp_path):
    def turned(dataset):
        del dataset.attrs["planetary_beta"]
        slope = 1e-11 * dataset["x"].values[None, :] + 2e-11 * dataset["y"].values[:, None]
        dataset["coriolis_parameter"].values[:] = 1e-4 + slope
        return dataset

    with opened(tmp_path, each(turned)) as ensemble:
        np.testing.assert_allclose(ensemble.grid.planetary_beta_x, 1e-11, rtol=1e-9)
        np.testing.assert_allclose(ensemble.grid.planetary_beta_y, 2e-11, rtol=1e-9)
        assert any("gradient of the Coriolis" in text for text in ensemble.assumptions)


def test_attributes_of_the_files_tell_periodic_axes_layers_and_beta(tmp_path):
    def periodic(dataset):
        dataset.attrs["periodic"] = "x y"
        return dataset

    with opened(tmp_path, each(periodic)) as ensemble:
        geometry = ensemble.grid.geometry
        assert (geometry.periodic_x, geometry.periodic_y) == (True, True)
        assert ensemble.grid.vertical == "layers"
        assert ensemble.grid.reduced_gravity is not None
        np.testing.assert_array_equal(ensemble.grid.reduced_gravity, 0.016)
        np.testing.assert_array_equal(ensemble.grid.planetary_beta_y, 2e-11)
        assert ensemble.assumptions == ()


def test_the_study_overrules_the_files(tmp_path):
    grid = {"periodic": ["y"], "vertical": "levels", "layer_thickness": [500.0, 2500.0]}
    with opened(tmp_path, grid={**grid, "reduced_gravity": [0.02], "dx": 7e3}) as ensemble:
        found = ensemble.grid
    assert (found.geometry.periodic_x, found.geometry.periodic_y) == (False, True)
    assert found.vertical == "levels"
    np.testing.assert_array_equal(found.layer_thickness[:, 0, 0], [500.0, 2500.0])
    np.testing.assert_array_equal(found.reduced_gravity, 0.02)
    np.testing.assert_array_equal(found.geometry.dx, 7e3)


def upside_down(dataset):
    return dataset.isel(layer=slice(None, None, -1))


@pytest.mark.parametrize("told_by", ["study", "positive", "standard name"])
def test_files_with_the_bottom_first_are_turned(tmp_path, told_by):
    def change(dataset):
        dataset = upside_down(dataset)
        attributes = {"positive": {"positive": "up", "units": "m"}, "study": {"units": "m"}}.get(
            told_by, {"standard_name": "depth", "units": "m"}
        )
        places = [2500.0, 500.0] if told_by == "standard name" else [-2500.0, -500.0]
        return dataset.assign_coords(layer=("layer", places, attributes))

    grid = {"top": "last"} if told_by == "study" else {}
    with (
        opened(tmp_path / "right") as right,
        opened(tmp_path / "turned", each(change), grid) as turned,
    ):
        np.testing.assert_array_equal(turned.grid.layer_thickness, right.grid.layer_thickness)
        for name, values in right.fields(0).items():
            np.testing.assert_array_equal(turned.fields(0)[name], values)


def test_thickness_comes_from_bounds_when_nothing_else_tells_it(tmp_path):
    def bounded(dataset):
        dataset = dataset.drop_vars("layer_thickness")
        attributes = {"units": "km", "positive": "down", "bounds": "layer_bounds"}
        dataset = dataset.assign_coords(layer=("layer", [0.5, 2.5], attributes))
        dataset["layer_bounds"] = (("layer", "edge"), [[0.0, 1.0], [1.0, 4.0]])
        return dataset

    with opened(tmp_path, each(bounded)) as ensemble:
        np.testing.assert_allclose(ensemble.grid.layer_thickness[:, 3, 3], [1e3, 3e3], rtol=1e-15)


def test_land_comes_from_missing_tracers_layer_by_layer(tmp_path):
    def with_land(dataset):
        for name in ("x_velocity", "y_velocity", "dye_a", "dye_b", "dye_c", "dye_d"):
            dataset[name].values[:, :, 2:4, 5] = np.nan
            dataset[name].values[:, 1, 7, 8] = np.nan
        return dataset

    with opened(tmp_path, each(with_land)) as ensemble:
        grid = ensemble.grid
        land = np.zeros(grid.shape, bool)
        land[:, 2:4, 5] = land[1, 7, 8] = True
        np.testing.assert_array_equal(grid.geometry.mask, ~land)
        np.testing.assert_array_equal(grid.layer_thickness == 0.0, land)
        np.testing.assert_array_equal(grid.sea_floor_depth == 0.0, land.all(axis=0))
        for values in ensemble.fields(1).values():
            assert (values[:, land] == 0.0).all()
            assert np.isfinite(values).all()


def on_faces(size):
    """Move the velocities of a member to the faces, x with one more than cells if asked."""

    def change(dataset):
        for part, axis, dims in (
            ("x_velocity", -1, ("time", "layer", "y", "x_face")),
            ("y_velocity", -2, ("time", "layer", "y_face", "x")),
        ):
            values = dataset[part].values.astype(np.float64)
            first = np.zeros_like(np.take(values, [0], axis=axis))
            faces = np.concatenate([first, values], axis=axis) if size == "one more" else values
            attributes = dataset[part].attrs
            dataset = dataset.drop_vars(part)
            dataset[part] = (dims, faces, attributes)
        return dataset

    return each(change)


@pytest.mark.parametrize("size", ["one more", "as many"])
def test_velocities_on_faces_come_to_centres(tmp_path, size):
    grid = {"faces": {"x_velocity": "east", "y_velocity": "north"}}
    with (
        opened(tmp_path / "centres") as centres,
        opened(tmp_path / "faces", on_faces(size), grid) as faces,
    ):
        east = centres.fields(1)["x_velocity"]
        west = np.concatenate([np.zeros_like(east[..., :1]), east[..., :-1]], axis=-1)
        np.testing.assert_allclose(faces.fields(1)["x_velocity"], 0.5 * (east + west), atol=1e-15)
        north = centres.fields(1)["y_velocity"]
        south = np.concatenate([np.zeros_like(north[..., :1, :]), north[..., :-1, :]], axis=-2)
        found = faces.fields(1)["y_velocity"]
        np.testing.assert_allclose(found, 0.5 * (north + south), atol=1e-15)


@given(st.sampled_from(["east", "west", "north", "south"]), st.booleans())
@settings(max_examples=16, derandomize=True, deadline=None)
def test_a_uniform_flow_keeps_its_speed_away_from_walls(face, periodic):
    cells = Cells(4, 5, periodic, periodic)
    centred = to_centres(np.ones((1, 4, 5)), face, cells)
    halved = 0 if periodic else (4 if face in ("east", "west") else 5)
    assert np.count_nonzero(centred == 0.5) == halved
    assert np.count_nonzero(centred == 1.0) == 20 - halved


@given(st.integers(0, 2**32 - 1), st.booleans())
@settings(max_examples=20, derandomize=True, deadline=None)
def test_east_and_west_faces_are_the_same_faces(seed, periodic):
    random = np.random.default_rng(seed)
    cells = Cells(4, 6, periodic, False)
    mask = random.random((2, 4, 6)) > 0.3
    east_open = between_cells(mask, "east", 6, cells)
    flow = np.where(east_open, random.normal(size=mask.shape), np.nan)
    west = np.roll(flow, 1, axis=-1)
    np.testing.assert_array_equal(between_cells(mask, "west", 6, cells), np.isfinite(west))
    all_faces = np.concatenate([flow[..., -1:], flow], axis=-1)
    np.testing.assert_array_equal(between_cells(mask, "east", 7, cells), np.isfinite(all_faces))
    expected = to_centres(flow, "east", cells)
    np.testing.assert_array_equal(to_centres(west, "west", cells), expected)
    np.testing.assert_array_equal(to_centres(all_faces, "west", cells), expected)


def test_times_need_no_reference_date_and_come_in_days(tmp_path):
    def hours(dataset):
        return dataset.assign_coords(time=("time", [24.0, 48.0, 60.0], {"units": "hours"}))

    with opened(tmp_path, each(hours)) as ensemble:
        np.testing.assert_allclose(ensemble.times, [1.0, 2.0, 2.5], rtol=1e-15)


def test_what_has_no_units_is_assumed_and_said(tmp_path):
    def bare(dataset):
        for name in ("x", "time", "dye_a"):
            del dataset[name].attrs["units"]
        return dataset

    with opened(tmp_path, each(bare)) as ensemble:
        assert "'x' is in m, since it has no units" in ensemble.assumptions
        assert "'time' is in days, since it has no units" in ensemble.assumptions
        assert "'dye_a' is a pure number, since it has no units" in ensemble.assumptions


def test_faces_without_velocity_between_sea_cells_are_walls_and_said(tmp_path):
    def walled(dataset):
        dataset = on_faces("as many")(0, dataset)
        dataset["x_velocity"].values[:, 0, 4:7, 3] = np.nan
        return dataset

    grid = {"faces": {"x_velocity": "east", "y_velocity": "north"}}
    with opened(tmp_path / "wall", each(walled), grid) as ensemble:
        assert "3 faces between sea cells are walls" in " ".join(ensemble.assumptions)
        found = ensemble.fields(0)["x_velocity"]
        east = np.stack([member.dataset["x_velocity"].values[0] for member in ensemble.members])
    np.testing.assert_array_equal(found[:, 0, 4:7, 3], 0.5 * east[:, 0, 4:7, 2].astype(float))

    def leaking(number, dataset):
        dataset = walled(dataset)
        if number == 1:
            dataset["x_velocity"].values[1, 0, 5, 3] = 0.2
        return dataset

    with (
        opened(tmp_path / "leak", leaking, grid) as ensemble,
        pytest.raises(SourceError, match=r"member_01\.nc: x_velocity: values stand where"),
    ):
        ensemble.fields(1)
