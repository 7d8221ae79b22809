"""Members in one file each, along a dimension, in NetCDF of both kinds and in Zarr."""

from __future__ import annotations

import numpy as np
import pytest
import xarray as xr

from ensemble_files import member_dataset, write_members
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.ensemble.sources import content_digest, find_files
from learnclosure.study import EnsembleTable

MEMBERS = 3
FIELDS = ("x_velocity", "y_velocity", "dye_a", "dye_b", "dye_c", "dye_d")


def table(files, **more):
    return EnsembleTable(name="north", files=files, **more)


def joined(dim="member"):
    """All members in one dataset, along a dimension of their own."""
    parts = [member_dataset(number).drop_vars("realization") for number in range(MEMBERS)]
    together = parts[0].copy()
    for name in FIELDS:
        together[name] = xr.concat([part[name] for part in parts], dim)
    return together


def everything(opened):
    return [opened.fields(time) for time in range(len(opened.times))]


def assert_alike(found, expected):
    for ours, theirs in zip(found, expected, strict=True):
        assert ours.keys() == theirs.keys()
        for name, values in theirs.items():
            np.testing.assert_array_equal(ours[name], values)


@pytest.fixture(scope="module")
def plain():
    """Return what any way of storing the members must give back."""
    parts = [member_dataset(number) for number in range(MEMBERS)]
    return [
        {name: np.stack([part[name].values[time] for part in parts]).astype(float)
         for name in FIELDS}
        for time in range(3)
    ]  # fmt: skip


def test_one_file_for_each_member(tmp_path, plain):
    write_members(tmp_path / "north", members=MEMBERS)
    with open_ensemble(table("north/*.nc"), tmp_path) as ensemble:
        assert ensemble.member_labels == (0, 1, 2)
        assert ensemble.tracers == ("dye_a", "dye_b", "dye_c")
        assert ensemble.withheld_tracers == ("dye_d",)
        assert not ensemble.has_buoyancy
        np.testing.assert_array_equal(ensemble.times, [0.0, 5.0, 10.0])
        assert_alike(everything(ensemble), plain)


def test_a_list_of_files_keeps_its_order(tmp_path, plain):
    write_members(tmp_path, members=MEMBERS)
    files = tuple(f"member_0{number}.nc" for number in (2, 0, 1))
    with open_ensemble(table(files), tmp_path) as ensemble:
        assert ensemble.member_labels == (2, 0, 1)
        np.testing.assert_array_equal(ensemble.fields(1)["dye_b"], plain[1]["dye_b"][[2, 0, 1]])


@pytest.mark.parametrize("dim", ["member", "realization", "run"])
def test_members_along_a_dimension(tmp_path, plain, dim):
    joined(dim).to_netcdf(tmp_path / "all.nc", engine="h5netcdf")
    grid = {"member": dim} if dim == "run" else {}
    with open_ensemble(table("all.nc", grid=grid), tmp_path) as ensemble:
        assert len(ensemble.member_labels) == MEMBERS
        assert_alike(everything(ensemble), plain)


def test_the_member_dimension_may_stand_after_time(tmp_path, plain):
    moved = joined().transpose("time", "member", ...)
    moved.to_netcdf(tmp_path / "all.nc", engine="h5netcdf")
    with open_ensemble(table("all.nc"), tmp_path) as ensemble:
        assert_alike(everything(ensemble), plain)


@pytest.mark.parametrize("version", [2, 3])
def test_a_zarr_store(tmp_path, plain, version):
    joined().chunk({"time": 1}).to_zarr(
        tmp_path / "all.zarr", zarr_format=version, consolidated=version == 2
    )
    with open_ensemble(table("all.zarr"), tmp_path) as ensemble:
        assert_alike(everything(ensemble), plain)


def test_one_zarr_store_for_each_member(tmp_path, plain):
    for number in range(MEMBERS):
        member_dataset(number).to_zarr(tmp_path / f"m{number}.zarr", zarr_format=2)
    with open_ensemble(table("m*.zarr"), tmp_path) as ensemble:
        assert_alike(everything(ensemble), plain)


def test_classic_netcdf(tmp_path, plain):
    for number in range(MEMBERS):
        member_dataset(number).to_netcdf(
            tmp_path / f"m{number}.nc", engine="scipy", format="NETCDF3_64BIT"
        )
    with open_ensemble(table("m*.nc"), tmp_path) as ensemble:
        assert_alike(everything(ensemble), plain)


def test_times_may_be_read_in_any_order_and_in_small_blocks(tmp_path, plain, monkeypatch):
    monkeypatch.setattr("learnclosure.ensemble.reader.BLOCK_BYTES", 1.0)
    write_members(tmp_path, members=MEMBERS)
    with open_ensemble(table("*.nc"), tmp_path) as ensemble:
        assert_alike([ensemble.fields(time) for time in (2, 0, 1)], [plain[t] for t in (2, 0, 1)])


def test_files_of_one_name_in_many_folders_are_numbered(tmp_path):
    for number in range(MEMBERS):
        folder = tmp_path / f"run{number}"
        folder.mkdir()
        member_dataset(number).drop_vars("realization").to_netcdf(
            folder / "out_2000.nc", engine="h5netcdf"
        )
    with open_ensemble(table("run*/out_2000.nc"), tmp_path) as ensemble:
        assert ensemble.member_labels == (0, 1, 2)


def test_the_digest_of_an_ensemble_follows_its_contents(tmp_path):
    write_members(tmp_path, members=2)
    paths = find_files(table("*.nc"), tmp_path)
    before = content_digest(paths)
    assert content_digest(paths) == before
    paths[1].write_bytes(paths[1].read_bytes() + b"\0")
    assert content_digest(paths) != before


def test_a_closed_ensemble_leaves_no_file_open(tmp_path):
    write_members(tmp_path, members=2)
    with open_ensemble(table("*.nc"), tmp_path) as ensemble:
        ensemble.fields(0)
    for path in find_files(table("*.nc"), tmp_path):
        with xr.open_dataset(path, engine="h5netcdf", decode_times=False) as dataset:
            changed = dataset.load()
        changed.to_netcdf(path, engine="h5netcdf")
