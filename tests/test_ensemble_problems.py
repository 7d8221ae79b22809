"""All that is wrong with an ensemble is listed, one clear sentence each."""

from __future__ import annotations

import numpy as np
import pytest

from ensemble_cases import write_classic
from ensemble_files import member_dataset
from learnclosure.ensemble.problems import find_problems
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.ensemble.readiness import inspect_ensemble
from learnclosure.errors import GridError, SourceError
from learnclosure.study import EnsembleTable


def table_of(files="*.nc", **variables):
    return EnsembleTable(name="north", files=files, variables=variables)


def listed(folder, change=None, members=4, **variables):
    write_classic(folder, members=members, change=change)
    return inspect_ensemble(table_of(**variables), folder).problems


def test_every_missing_variable_is_listed(tmp_path):
    problems = listed(
        tmp_path, x_velocity="zonal", tracers=["dye_a", "dye_x"], withheld_tracers=["dye_y"]
    )
    assert len(problems) == 3
    for name, text in zip(("zonal", "dye_x", "dye_y"), problems, strict=True):
        assert f"{name}: the variable named by" in text


def test_every_member_that_differs_is_listed(tmp_path):
    def spoil(number, dataset):
        if number == 1:
            return dataset.isel(time=[0, 2])
        if number == 2:
            dataset["dye_b"].attrs["units"] = "kg m-3"
        if number == 3:
            return dataset.assign_coords(x=("x", dataset["x"].values + 1.0, dataset["x"].attrs))
        return dataset

    problems = listed(tmp_path, spoil)
    assert len(problems) == 3
    assert "member_01.nc: time: a member lacks 1 of 3 times (found none at 5" in problems[0]
    assert "member_02.nc: dye_b: members differ in their units" in problems[1]
    assert "member_03.nc: x: members lie on different grids" in problems[2]


def test_every_file_that_cannot_be_opened_is_listed(tmp_path):
    write_classic(tmp_path, members=2)
    for number in (2, 3):
        (tmp_path / f"member_0{number}.nc").write_text("no data")
    problems = inspect_ensemble(table_of(("*.nc", "*.zarr")), tmp_path).problems
    assert len(problems) == 3
    assert "no file matches" in problems[0]
    assert all("is neither NetCDF nor a Zarr store" in text for text in problems[1:])


def test_every_unit_that_is_not_understood_is_listed(tmp_path):
    def spoil(_, dataset):
        dataset["dye_a"].attrs["units"] = "grumbles"
        dataset["dye_c"].attrs["units"] = "level"
        return dataset

    problems = listed(tmp_path, spoil)
    assert [text.split(": ")[1] for text in problems] == ["dye_a", "dye_c"]


def test_every_member_with_holes_is_listed(tmp_path):
    def hole(number, dataset):
        if number in (1, 3):
            dataset["dye_b"].values[0, 0, 4, 5] = np.nan
        return dataset

    problems = listed(tmp_path, hole)
    assert len(problems) == 2
    assert "member_01.nc: dye_b: values are missing in the sea" in problems[0]
    assert "member_03.nc" in problems[1]


def test_a_sound_ensemble_has_no_problems(tmp_path):
    assert listed(tmp_path) == []
    assert list(find_problems(table_of(), tmp_path)) == []


def opened(folder, change):
    write_classic(folder, members=3, change=change)
    with open_ensemble(table_of(), folder) as ensemble:
        for time in range(3):
            ensemble.fields(time)


def test_times_that_one_member_lacks_are_named(tmp_path):
    def short(number, dataset):
        return dataset.isel(time=slice(0, 1)) if number == 2 else dataset

    with pytest.raises(GridError, match=r"lacks 2 of 3 times \(found none at 5, 10, expected"):
        opened(tmp_path, short)


def test_a_member_with_a_time_of_its_own_is_refused(tmp_path):
    def late(number, dataset):
        if number == 2:
            time = dataset["time"].values + np.array([0.0, 0.0, 1.0])
            return dataset.assign_coords(time=("time", time, dataset["time"].attrs))
        return dataset

    with pytest.raises(GridError, match="members have different times"):
        opened(tmp_path, late)


def test_without_time_coordinates_their_number_must_agree(tmp_path):
    def bare(number, dataset):
        dataset = dataset.drop_vars("time")
        return dataset.isel(time=slice(0, 2)) if number == 2 else dataset

    with pytest.raises(GridError, match=r"another number of times \(found 2 times, expected 3"):
        opened(tmp_path, bare)


def test_a_member_that_ends_early_in_a_shared_file_is_named(tmp_path):
    # Stacked into one array, what a member lacks is a whole field of fill values.
    def early(number, dataset):
        if number == 1:
            for name in ("x_velocity", "y_velocity", *(f"dye_{letter}" for letter in "abcd")):
                dataset[name].values[2] = np.nan
        return dataset

    with pytest.raises(SourceError, match=r"a member has no values at one time.*time number 2"):
        opened(tmp_path, early)


def test_members_are_compared_before_anything_is_read(tmp_path):
    folder = tmp_path
    write_classic(folder, members=2)
    wide = member_dataset(2, columns=18)
    wide.to_netcdf(folder / "member_02.nc", engine="scipy", format="NETCDF3_64BIT")
    with pytest.raises(GridError, match="differ in their dimensions"):
        open_ensemble(table_of(), folder)
