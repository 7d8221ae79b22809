"""Ensembles that cannot be read, each refused in one sentence that names the place."""

from __future__ import annotations

import numpy as np
import pytest

from ensemble_cases import each, write_classic
from ensemble_files import member_dataset, write_members
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.errors import DiagnosisError, GridError, RoleError, SourceError, UnitError
from learnclosure.study import EnsembleTable

FIELDS = ("x_velocity", "y_velocity", "dye_a", "dye_b", "dye_c", "dye_d")


def read_all(folder, change=None, members=3, grid=None, variables=None, files="*.nc"):
    write_classic(folder, members=members, change=change)
    table = EnsembleTable(name="north", files=files, grid=grid or {}, variables=variables or {})
    with open_ensemble(table, folder) as ensemble:
        for time in range(len(ensemble.times)):
            ensemble.fields(time)


def refused(kind, message, folder, *arguments, **more):
    with pytest.raises(kind, match=message) as caught:
        read_all(folder, *arguments, **more)
    text = str(caught.value)
    assert "\n" not in text
    assert text.endswith(".")
    return text


def only_last(action):
    return lambda number, dataset: action(dataset) if number == 2 else dataset


def attribute(name, key, value):
    def action(dataset):
        dataset[name].attrs[key] = value
        return dataset

    return action


def holes(name, place):
    def action(dataset):
        dataset[name].values[place] = np.nan
        return dataset

    return action


def test_a_pattern_without_a_match(tmp_path):
    text = refused(SourceError, "no file matches", tmp_path, files="none_*.nc")
    assert "none_*.nc" in text
    assert "ensemble 'north'" in text


def test_a_file_matched_twice(tmp_path):
    refused(SourceError, "two patterns match one file", tmp_path, files=("*.nc", "member_00.nc"))


def test_one_member(tmp_path):
    refused(SourceError, "one member is no ensemble", tmp_path, members=1)


def test_two_members_of_one_label(tmp_path):
    def same(dataset):
        return dataset.assign_coords(realization=((), 4, {"standard_name": "realization"}))

    text = refused(SourceError, "two members have one label", tmp_path, each(same))
    assert "member_00.nc" in text
    assert "member_01.nc" in text


def test_a_file_that_is_something_else(tmp_path):
    (tmp_path / "z_notes.nc").write_text("not a file of data")
    refused(SourceError, r"z_notes\.nc: is neither NetCDF nor a Zarr store", tmp_path)


def test_a_file_cut_short(tmp_path):
    write_members(tmp_path, members=3)
    whole = (tmp_path / "member_01.nc").read_bytes()
    (tmp_path / "z_cut.nc").write_bytes(whole[: len(whole) // 2])
    refused(SourceError, r"z_cut\.nc: cannot be read as NetCDF or Zarr", tmp_path)


def test_data_damaged_inside_a_sound_file(tmp_path):
    dataset = member_dataset(3)
    path = tmp_path / "member_03.nc"
    options = {"dye_a": {"zlib": True, "complevel": 4}}
    dataset.to_netcdf(path, engine="h5netcdf", encoding=options)
    content = bytearray(path.read_bytes())
    places = [at for at in range(len(content) - 1) if content[at : at + 2] == b"\x78\x5e"]
    assert places, "the compressed block should start with a zlib header"
    for at in places:
        content[at + 2 : at + 40] = b"\xff" * 38
    path.write_bytes(content)
    refused(SourceError, r"member_03\.nc: dye_a: cannot be read", tmp_path)


def test_a_role_without_a_variable_lists_the_candidates(tmp_path):
    def nameless(dataset):
        del dataset["x_velocity"].attrs["standard_name"]
        return dataset.rename(x_velocity="zonal")

    text = refused(RoleError, "no variable is known to be 'x_velocity'", tmp_path, each(nameless))
    assert "zonal" in text
    assert "eastward_sea_water_velocity" in text


def test_a_role_with_two_variables(tmp_path):
    both = each(attribute("y_velocity", "standard_name", "sea_water_x_velocity"))
    refused(RoleError, "several may be 'x_velocity'", tmp_path, both)


def test_a_named_variable_that_is_not_there(tmp_path):
    text = refused(RoleError, "dye_x: the variable named by", tmp_path,
                   variables={"tracers": ["dye_a", "dye_x"]})  # fmt: skip
    assert "dye_a, dye_b" in text


def test_a_tracer_named_twice(tmp_path):
    names = {"tracers": ["dye_a", "dye_b"], "withheld_tracers": ["dye_a"]}
    refused(RoleError, "dye_a: a tracer is named twice", tmp_path, variables=names)


def test_fewer_than_two_tracers(tmp_path):
    text = refused(DiagnosisError, "at least two tracers", tmp_path,
                   variables={"tracers": ["dye_a"]})  # fmt: skip
    assert "dye_b" in text


def test_members_on_different_grids_name_both_files(tmp_path):
    def shifted(dataset):
        return dataset.assign_coords(x=("x", dataset["x"].values + 1.0, dataset["x"].attrs))

    text = refused(GridError, "members lie on different grids", tmp_path, only_last(shifted))
    assert "member_02.nc: x" in text
    assert "differ by up to 1" in text
    assert "member_00.nc" in text


def test_members_with_different_thickness(tmp_path):
    def thicker(dataset):
        dataset["layer_thickness"].values[0] += 10.0
        return dataset

    text = refused(GridError, "different grids", tmp_path, only_last(thicker))
    assert "member_02.nc: layer_thickness" in text


def test_members_of_different_size(tmp_path):
    text = refused(
        GridError, "differ in their dimensions", tmp_path, only_last(lambda d: d.isel(x=slice(8)))
    )
    assert "member_02.nc" in text


def test_members_with_different_times_name_both_files(tmp_path):
    def later(dataset):
        attributes = dataset["time"].attrs
        return dataset.assign_coords(time=("time", dataset["time"].values + 1.0, attributes))

    text = refused(GridError, "members have different times", tmp_path, only_last(later))
    assert "member_02.nc: time" in text
    assert "member_00.nc" in text


def test_times_that_do_not_grow(tmp_path):
    def twice(dataset):
        return dataset.assign_coords(time=("time", [0.0, 5.0, 5.0], dataset["time"].attrs))

    refused(SourceError, "time: times do not grow", tmp_path, each(twice))


def test_members_in_different_units(tmp_path):
    other = only_last(attribute("dye_b", "units", "1e-3"))
    refused(SourceError, r"member_02\.nc: dye_b: members differ in their units", tmp_path, other)


def test_a_member_without_a_variable(tmp_path):
    lost = only_last(lambda dataset: dataset.drop_vars("dye_c"))
    refused(SourceError, r"member_02\.nc: dye_c: a variable is missing", tmp_path, lost)


def test_all_land(tmp_path):
    def dry(dataset):
        for name in FIELDS:
            dataset[name].values[:] = np.nan
        return dataset

    refused(GridError, "all cells are land", tmp_path, each(dry))


@pytest.mark.parametrize("name", FIELDS)
def test_holes_in_the_sea_are_counted(tmp_path, name):
    change = only_last(holes(name, (1, 0, slice(2, 5), 5)))
    text = refused(SourceError, "values are missing in the sea", tmp_path, change)
    assert f"member_02.nc: {name}" in text
    assert "3 that are not finite at time number 1" in text


def test_a_cell_that_is_sea_only_at_times(tmp_path):
    change = each(holes("dye_a", (0, 0, 4, 5)))
    text = refused(SourceError, "dye_a: values are missing in the sea", tmp_path, change)
    assert "1 that are not finite at time number 0" in text

    def dry_first(dataset):
        for name in FIELDS:
            dataset[name].values[0, 0, 4, 5] = np.nan
        return dataset

    refused(SourceError, "values stand where the first member has land", tmp_path, each(dry_first))


@pytest.mark.parametrize("unit", ["PSU", "ppt", "furlongs-ish"])
def test_an_unknown_unit(tmp_path, unit):
    text = refused(
        UnitError, "dye_a: unknown unit", tmp_path, each(attribute("dye_a", "units", unit))
    )
    assert repr(unit) in text
    assert "member_00.nc" in text


def test_a_velocity_in_a_unit_of_something_else(tmp_path):
    change = each(attribute("x_velocity", "units", "kg m-2"))
    refused(UnitError, "x_velocity: a unit measures something else", tmp_path, change)


def on_other_points(dataset):
    moved = dataset["x_velocity"].rename(x="x_face")
    return dataset.drop_vars("x_velocity").assign(x_velocity=moved)


def test_a_velocity_on_an_undeclared_face(tmp_path):
    text = refused(GridError, "x_velocity: the velocity sits on other points", tmp_path,
                   each(on_other_points))  # fmt: skip
    assert "faces" in text
    assert "x_face" in text


def test_a_velocity_whose_own_latitudes_tell_of_an_undeclared_face(tmp_path):
    def two_dimensional(dataset):
        shape = (dataset.sizes["y"], dataset.sizes["x"])
        names = {"standard_name": "latitude", "units": "degrees_north"}
        for name in ("lat_t", "lat_u"):
            dataset[name] = (("y", "x"), np.full(shape, 40.0), names)
        for name in FIELDS:
            dataset[name].encoding["coordinates"] = "lat_u" if name == "x_velocity" else "lat_t"
        return dataset

    refused(GridError, "x_velocity: the velocity sits on other points", tmp_path,
            each(two_dimensional))  # fmt: skip


def test_a_velocity_that_fits_no_cells(tmp_path):
    def short(dataset):
        moved = dataset["x_velocity"].rename(x="x_face").isel(x_face=slice(9))
        return dataset.drop_vars("x_velocity").assign(x_velocity=moved.drop_vars("x_face"))

    grid = {"faces": {"x_velocity": "east"}}
    refused(GridError, "the velocity does not fit the cells", tmp_path, each(short), grid=grid)


def test_a_tracer_on_other_points(tmp_path):
    def moved(dataset):
        other = dataset["dye_b"].rename(layer="interface_layer").drop_vars("interface_layer")
        return dataset.drop_vars("dye_b").assign(dye_b=other)

    text = refused(GridError, "dye_b: a field sits on other points", tmp_path, each(moved))
    assert "interface_layer" in text


@pytest.mark.parametrize(
    ("drop", "message"),
    [
        ("layer_thickness", "the layer thickness is unknown"),
        ("coriolis_parameter", "the Coriolis parameter is unknown"),
        ("x", "the cell width is unknown"),
    ],
)
def test_what_a_grid_cannot_do_without(tmp_path, drop, message):
    refused(GridError, message, tmp_path, each(lambda dataset: dataset.drop_vars(drop)))


@pytest.mark.parametrize(
    ("grid", "message"),
    [
        ({"layer_thickness": [1.0, 2.0, 3.0]}, "'layer_thickness' does not fit"),
        ({"layer_thickness": [1.0, 0.0]}, "vertical cells in the sea have no thickness"),
        ({"reduced_gravity": [0.1, 0.2]}, "'reduced_gravity' does not fit"),
        ({"sea_floor_depth": 0.0}, "the sea has no depth"),
        ({"dx": -5.0}, "dx: a cell width is not positive"),
        ({"dx": "layer_thickness"}, "'dx' does not fit the grid"),
        ({"x": "column"}, "the dimension named by 'x'"),
        ({"member": "run"}, "the member dimension is missing"),
        ({"x": "layer", "layer": "x"}, "the dimensions cannot be understood"),
    ],
)
def test_a_grid_that_contradicts_the_files(tmp_path, grid, message):
    kind = SourceError if "member" in grid else GridError
    refused(kind, message, tmp_path, grid=grid)


def test_a_coordinate_that_runs_backwards(tmp_path):
    change = each(lambda dataset: dataset.isel(y=slice(None, None, -1)))
    refused(GridError, "y: the coordinate does not grow", tmp_path, change)


def test_degrees_along_one_axis_only(tmp_path):
    change = each(attribute("x", "units", "degrees_east"))
    refused(GridError, "one coordinate is an angle", tmp_path, change)
