"""Means over windows of the channel, and the total tracer fluxes summed over every step."""

from __future__ import annotations

import dataclasses

import numpy as np
import pytest

from learnclosure.ensemble.reader import open_ensemble
from learnclosure.simulate.channel import simulate_channel
from learnclosure.simulate.regimes import DAY
from learnclosure.simulate.targets import target_fields
from learnclosure.study import EnsembleTable
from simulate_cases import read_members, small_regime, started

SHORT = {
    "members": 2, "snapshots": 3, "spacing_days": 2.0, "spinup_days": 2.0, "tracer_days": 2.0,
}  # fmt: skip


def test_tracer_content_changes_by_what_passed_the_faces_and_what_was_relaxed():
    # Conservation, cell by cell: dC/dt = -div F + (target - C)/tau, over a window. The
    # Adams-Bashforth weights move a step's worth across the ends of the window.
    regime = small_regime()
    channel = started(regime, days=6)
    targets = target_fields(regime)
    channel.release_tracers(targets)
    channel.advance(5 * regime.steps_per_day)
    before = channel.tracers.astype(np.float64)
    channel.start_window()
    days = 20
    channel.advance(days * regime.steps_per_day)
    means = channel.window_means()
    change = (channel.tracers - before) / (days * DAY)
    spread = (
        (means.flux_x - np.roll(means.flux_x, 1, axis=-1))
        + (means.flux_y - np.roll(means.flux_y, 1, axis=-2))
    ) / regime.spacing
    relaxed = (targets - means.tracers) / (regime.tracer_relaxation_days * DAY)
    size = np.sqrt(np.mean(spread**2))
    assert np.sqrt(np.mean((change + spread - relaxed) ** 2)) < 0.02 * size


def test_the_mean_streamfunction_carries_the_mean_transport():
    # A tracer that is one everywhere: its total flux is the mean velocity through the face.
    regime = small_regime()
    channel = started(regime, days=3)
    channel.release_tracers(np.ones((1, regime.rows, regime.columns)))
    channel.start_window()
    channel.advance(regime.steps_per_day)
    means = channel.window_means()
    west, south = channel.face_velocities(means.corner)
    np.testing.assert_allclose(means.flux_x[:, :, 0], np.roll(west, -1, axis=-1), atol=2e-6)
    np.testing.assert_allclose(means.flux_y[:, :, 0], np.roll(south, -1, axis=-2), atol=2e-6)


def test_summing_changes_nothing_of_the_flow():
    regime = small_regime()
    flows = []
    for summed in (False, True):
        channel = started(regime, days=2)
        channel.release_tracers(target_fields(regime))
        if summed:
            channel.start_window()
        channel.advance(regime.steps_per_day)
        flows.append((channel.vorticity.copy(), channel.tracers.copy()))
    for one, other in zip(*flows, strict=True):
        np.testing.assert_array_equal(one, other)


def test_a_window_starts_where_the_last_one_ended(tmp_path):
    # Two windows of two days average to one of four.
    regime = small_regime()
    short = simulate_channel(regime, tmp_path / "short", fluxes=True, **SHORT)
    options = {**SHORT, "snapshots": 1, "spacing_days": 4.0, "tracer_days": 4.0}
    long = simulate_channel(regime, tmp_path / "long", fluxes=True, **options)
    parts, whole = read_members(short), read_members(long)
    np.testing.assert_allclose(whole["time_bounds"][0], [[2.0, 6.0]])
    np.testing.assert_allclose(parts["time_bounds"][0], [[2.0, 4.0], [4.0, 6.0], [6.0, 8.0]])
    for name in ("x_velocity", "tracer_3", "tracer_3_flux_x", "tracer_3_flux_y"):
        np.testing.assert_allclose(
            parts[name][:, :2].mean(axis=1), whole[name][:, 0], rtol=1e-3, atol=1e-5
        )


def test_the_reader_finds_the_eddy_flux_within_each_window(tmp_path):
    regime = dataclasses.replace(small_regime(), name="sedge")
    folder = simulate_channel(regime, tmp_path, fluxes=True, **SHORT)
    table = EnsembleTable(name="sedge", files=str(folder / "*.nc"))
    with open_ensemble(table) as ensemble:
        fields = ensemble.fields(1)
        assert any("total fluxes" in said for said in ensemble.assumptions)
    raw = read_members(folder)
    east = raw["tracer_2_flux_x"][:, 1].astype(np.float64)
    centred = 0.5 * (east + np.roll(east, 1, axis=-1))
    expected = centred - fields["x_velocity"] * fields["tracer_2"]
    np.testing.assert_allclose(fields["tracer_2_within_x"], expected, atol=1e-12)
    north = raw["tracer_2_flux_y"][:, 1].astype(np.float64)
    centred = 0.5 * (north + np.roll(north, 1, axis=-2))
    expected = centred - fields["y_velocity"] * fields["tracer_2"]
    np.testing.assert_allclose(fields["tracer_2_within_y"], expected, atol=1e-12)


def test_files_with_windows_keep_the_conventions(tmp_path):
    folder = simulate_channel(small_regime(), tmp_path, fluxes=True, **SHORT)
    import h5netcdf

    with h5netcdf.File(folder / "member_00.nc", "r") as file:
        assert file.variables["time"].attrs["bounds"] == "time_bounds"
        flux = file.variables["tracer_1_flux_y"]
        assert flux.attrs["cell_methods"] == "time: mean"
        assert flux.attrs["units"] == "m s-1"
        assert (flux.attrs["total_flux_of"], flux.attrs["face"]) == ("tracer_1", "north")


@pytest.mark.parametrize("fluxes", [False, True])
def test_what_is_there_is_kept_only_if_it_was_made_alike(tmp_path, fluxes):
    regime = small_regime()
    folder = simulate_channel(regime, tmp_path, fluxes=fluxes, **SHORT)
    stamp = (folder / "member_00.nc").stat().st_mtime_ns
    simulate_channel(regime, tmp_path, fluxes=fluxes, **SHORT)
    assert (folder / "member_00.nc").stat().st_mtime_ns == stamp
    simulate_channel(regime, tmp_path, fluxes=not fluxes, **SHORT)
    assert (folder / "member_00.nc").stat().st_mtime_ns != stamp
