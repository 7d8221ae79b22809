"""Channel ensembles on disk: layout, same bytes, resuming, two regions at once."""

from __future__ import annotations

import dataclasses
import os
import re
import subprocess
import sys
from pathlib import Path

import h5netcdf
import numpy as np
import pytest

from learnclosure.errors import InputError, OutputError, SimulationError
from learnclosure.simulate.channel import simulate_channel, simulate_regions
from simulate_cases import read_members, small_regime

SHORT = {
    "members": 2, "snapshots": 2, "spacing_days": 1.0, "spinup_days": 2.0, "tracer_days": 1.0,
}  # fmt: skip


def test_files_follow_the_conventions(tmp_path):
    folder = simulate_channel(small_regime(), tmp_path, **SHORT)
    with h5netcdf.File(folder / "member_01.nc", "r") as file:
        assert file.attrs["Conventions"] == "CF-1.11"
        assert file.attrs["periodic"] == "x y"
        assert file.attrs["vertical"] == "layers"
        assert file.attrs["planetary_beta"] == 2.0e-11
        assert file.variables["realization"][...] == 1
        assert file.variables["time"].attrs["units"].startswith("days since 2000-01-01")
        np.testing.assert_allclose(file.variables["time"][...], [3.0, 4.0])
        for name, standard_name in (
            ("x_velocity", "sea_water_x_velocity"),
            ("y_velocity", "sea_water_y_velocity"),
            ("sea_floor_depth", "sea_floor_depth_below_geoid"),
            ("coriolis_parameter", "coriolis_parameter"),
        ):
            assert file.variables[name].attrs["standard_name"] == standard_name
        for name, variable in file.variables.items():
            assert variable.attrs["long_name"], name
            assert variable.attrs["units"], name
        roles = [
            variable.attrs["tracer_role"]
            for variable in file.variables.values()
            if "tracer_role" in variable.attrs
        ]
        assert roles == ["inversion"] * 6 + ["withheld"] * 2
        assert file.variables["tracer_1"].dimensions == ("time", "layer", "y", "x")
        assert file.variables["tracer_1"].dtype == np.float32
        # f^2 Ld^2 (H1 + H2) / (H1 H2)
        np.testing.assert_allclose(
            file.variables["reduced_gravity"][...], [1e-8 * 35e3**2 * 4000 / 3e6]
        )


def test_public_compliance_checker_finds_no_error(tmp_path):
    from compliance_checker.cf.cf_1_11 import CF1_11Check
    from compliance_checker.suite import CheckSuite

    folder = simulate_channel(small_regime(), tmp_path, **{**SHORT, "members": 1})
    suite = CheckSuite()
    suite.checkers = {"cf:1.11": CF1_11Check}
    dataset = suite.load_dataset(str(folder / "member_00.nc"))
    results, failures = suite.run_all(dataset, ["cf:1.11"])["cf:1.11"]
    assert not failures
    errors = [
        message
        for result in results
        if result.weight == 3 and result.value[0] < result.value[1]
        for message in result.msgs
    ]
    assert errors == []
    assert len(results) >= 20


def test_members_differ_and_hold_finite_fields(tmp_path):
    members = read_members(simulate_channel(small_regime(), tmp_path, **SHORT))
    assert all(np.isfinite(values).all() for values in members.values())
    assert np.abs(np.diff(members["x_velocity"], axis=0)).max() > 1e-3
    assert members["sea_floor_depth"].min() < 3800


def test_same_seed_gives_the_same_bytes_and_another_does_not(tmp_path):
    first = simulate_channel(small_regime(), tmp_path / "a", **SHORT)
    second = simulate_channel(small_regime(), tmp_path / "b", **SHORT)
    other = simulate_channel(small_regime(), tmp_path / "c", **SHORT, seed=1)
    names = sorted(path.name for path in first.iterdir())
    assert names == ["member_00.nc", "member_01.nc", "simulation.json"]
    for name in names:
        assert (first / name).read_bytes() == (second / name).read_bytes()
    assert (first / names[0]).read_bytes() != (other / names[0]).read_bytes()


def test_a_member_does_not_depend_on_how_many_there_are(tmp_path):
    few = simulate_channel(small_regime(), tmp_path / "few", **SHORT)
    more = simulate_channel(small_regime(), tmp_path / "more", **{**SHORT, "members": 3})
    for name in ("member_00.nc", "member_01.nc"):
        assert (few / name).read_bytes() == (more / name).read_bytes()


def test_a_complete_region_is_kept_and_anything_less_is_made_anew(tmp_path):
    reports = []
    folder = simulate_channel(small_regime(), tmp_path, **SHORT)
    stamp = (folder / "member_00.nc").stat().st_mtime_ns
    simulate_channel(
        small_regime(), tmp_path, **SHORT, progress=lambda *report: reports.append(report)
    )
    assert reports == [("sedge", 1.0, "kept what is there")]
    assert (folder / "member_00.nc").stat().st_mtime_ns == stamp
    (folder / "member_01.nc").unlink()
    simulate_channel(small_regime(), tmp_path, **SHORT)
    assert (folder / "member_01.nc").is_file()
    before = (folder / "member_01.nc").read_bytes()
    simulate_channel(small_regime(beta=1.9e-11), tmp_path, **SHORT)
    assert (folder / "member_01.nc").read_bytes() != before


def test_a_folder_with_other_things_is_left_alone(tmp_path):
    notes = tmp_path / "sedge" / "notes.txt"
    notes.parent.mkdir()
    notes.write_text("mine")
    with pytest.raises(OutputError, match="sedge: holds something that is no simulated ensemble"):
        simulate_channel(small_regime(), tmp_path, **SHORT)
    assert notes.read_text() == "mine"


def test_a_failed_region_leaves_nothing_behind(tmp_path):
    with pytest.raises(SimulationError, match=r"sedge: day 1: .* too fast"):
        simulate_channel(small_regime(time_step=43200.0), tmp_path, **SHORT)
    assert list(tmp_path.iterdir()) == []


def test_counts_and_spacings_that_make_no_sense_are_refused(tmp_path):
    with pytest.raises(InputError, match=r"sedge: snapshots cannot be this few \(found 0"):
        simulate_channel(small_regime(), tmp_path, snapshots=0)
    with pytest.raises(InputError, match="snapshots fall on the same time step"):
        simulate_channel(small_regime(), tmp_path, snapshots=2, spacing_days=0.0)
    with pytest.raises(InputError, match=re.escape("two regions have the same name")):
        simulate_regions([small_regime(), small_regime()], tmp_path)


def test_regions_side_by_side_equal_regions_alone_and_report_progress(tmp_path):
    regimes = [small_regime(), dataclasses.replace(small_regime(), name="tansy")]
    shares: dict[str, list[float]] = {}

    def progress(region, share, note):
        shares.setdefault(region, []).append(share)

    written = simulate_regions(regimes, tmp_path / "both", **SHORT, workers=2, progress=progress)
    assert [path.name for path in written] == ["sedge", "tansy"]
    assert all(steps == sorted(steps) and steps[-1] == 1.0 for steps in shares.values())
    alone = simulate_channel(regimes[1], tmp_path / "alone", **SHORT)
    name = "member_00.nc"
    assert (written[1] / name).read_bytes() == (alone / name).read_bytes()


def test_a_failure_in_one_region_stops_the_other_and_is_told(tmp_path):
    regimes = [small_regime(), small_regime(name="tansy", time_step=43200.0)]
    with pytest.raises(SimulationError, match=r"tansy: day 1: .* too fast"):
        simulate_regions(regimes, tmp_path, members=1, snapshots=4000, workers=2)
    assert list(tmp_path.iterdir()) == []


COLD_OR_WARM = """
import sys
from pathlib import Path
from simulate_cases import small_regime
from learnclosure.simulate.channel import simulate_channel
simulate_channel(small_regime(), Path(sys.argv[1]), members=1, snapshots=1, spinup_days=2,
                 tracer_days=2)
"""


def test_kernels_just_compiled_and_kernels_read_from_disk_give_the_same_bytes(tmp_path):
    environment = os.environ | {
        "NUMBA_CACHE_DIR": str(tmp_path / "cache"),
        "PYTHONPATH": str(Path(__file__).parent),
    }
    for name in ("cold", "warm"):
        words = [sys.executable, "-c", COLD_OR_WARM, str(tmp_path / name)]
        subprocess.run(words, env=environment, check=True)
    assert list((tmp_path / "cache").rglob("*.nbc"))
    cold, warm = (tmp_path / name / "sedge" / "member_00.nc" for name in ("cold", "warm"))
    assert cold.read_bytes() == warm.read_bytes()
