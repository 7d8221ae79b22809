"""Ensembles of the two-layer quasi-geostrophic channel, written region by region."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from contextlib import ExitStack
from dataclasses import asdict
from functools import partial
from pathlib import Path

import numpy as np

from learnclosure.atomic import atomic_folder
from learnclosure.errors import InputError
from learnclosure.simulate.dynamics import Channel, ridge_height, uniform_gradients
from learnclosure.simulate.files import (
    ActiveLabel,
    Layout,
    MemberFile,
    TracerLabel,
    expect_counts,
    flux_name,
    is_complete,
    write_record,
)
from learnclosure.simulate.processes import run_in_processes
from learnclosure.simulate.regimes import ChannelRegime
from learnclosure.simulate.targets import CHANNEL_WAVES, target_fields

Progress = Callable[[str, float, str], None]

SPINUP_DAYS = 80.0
"""Days without tracers, in which the eddies grow to full strength (about 80 days)."""

TRACER_DAYS = 60.0
"""Days with tracers before the first snapshot, against their relaxation time of 60."""

SPACING_DAYS = 5.0
"""Days between snapshots."""

TRACER_STEP_COST = 3
"""Measured cost of a step with tracers over that of one without."""


def _silent(region: str, share: float, note: str) -> None:
    """Report nothing."""


def _active_labels(regime: ChannelRegime) -> tuple[ActiveLabel, ...]:
    slopes = uniform_gradients(regime)
    return (
        ActiveLabel(
            "potential_vorticity",
            "quasi-geostrophic potential vorticity without its uniform gradient",
            "s-1",
            slopes["potential_vorticity"],
        ),
        ActiveLabel(
            "thickness",
            "layer thickness at the time without its uniform gradient",
            "m",
            slopes["thickness"],
            "cell_thickness",
        ),
    )


def _layout(regime: ChannelRegime, times: Sequence[float], window: float | None) -> Layout:
    return Layout(
        title=f"two-layer quasi-geostrophic channel, invented region {regime.name}",
        source="learnclosure built-in channel, potential vorticity and tracers by "
        "fifth-order upwind finite volumes",
        x=(np.arange(regime.columns) + 0.5) * regime.spacing,
        y=(np.arange(regime.rows) + 0.5) * regime.spacing,
        layer_thickness=np.array(regime.thicknesses),
        reduced_gravity=np.array([regime.reduced_gravity]),
        sea_floor_depth=sum(regime.thicknesses) - ridge_height(regime),
        coriolis_parameter=regime.coriolis_parameter,
        planetary_beta=regime.beta,
        periodic="x y",
        times=np.array(times),
        tracers=tuple(TracerLabel(wave.name, wave.long_name, wave.role) for wave in CHANNEL_WAVES),
        window=window,
        active=_active_labels(regime),
    )


def _snapshot_steps(
    regime: ChannelRegime, snapshots: int, first_day: float, spacing_days: float
) -> list[int]:
    steps = [
        round((first_day + snapshot * spacing_days) * regime.steps_per_day)
        for snapshot in range(snapshots)
    ]
    if len(set(steps)) < snapshots or not all(math.isfinite(step) for step in steps):
        raise InputError(
            "snapshots fall on the same time step",
            where=f"{regime.name}: spacing_days",
            found=spacing_days,
            expected="at least one time step",
            remedy="choose a longer spacing",
        )
    return steps


class _Stopwatch:
    """Share of the work done; steps with tracers cost more than those without."""

    def __init__(self, channel: Channel, release: int, end: int, progress: Progress) -> None:
        self._channel = channel
        self._release = release
        self._end = end
        self._progress = progress
        self.report()

    def _work(self, steps: int) -> int:
        return min(steps, self._release) + max(steps - self._release, 0) * TRACER_STEP_COST

    def report(self) -> None:
        share = self._work(self._channel.steps) / max(self._work(self._end), 1)
        last_day = self._end / self._channel.regime.steps_per_day
        note = f"day {self._channel.days:.0f} of {last_day:.0f}"
        self._progress(self._channel.regime.name, share, note)


def _run_to(channel: Channel, step: int, stopwatch: _Stopwatch) -> None:
    """Advance to a step, checking the flow once a day."""
    while channel.steps < step:
        channel.advance(min(channel.regime.steps_per_day, step - channel.steps))
        channel.check()
        stopwatch.report()


def _write_snapshot(channel: Channel, files: Sequence[MemberFile], time: int) -> None:
    u, v = channel.centre_velocities()
    thickness = channel.layer_thicknesses()
    for member, file in enumerate(files):
        tracers = {
            wave.name: channel.tracers[member, :, index] for index, wave in enumerate(CHANNEL_WAVES)
        }
        fields = {
            "x_velocity": u[member],
            "y_velocity": v[member],
            "potential_vorticity": channel.vorticity[member],
            "thickness": thickness[member],
        }
        file.write(time, {**fields, **tracers})


def _write_window(channel: Channel, files: Sequence[MemberFile], time: int) -> None:
    means = channel.window_means()
    u, v = channel.centre_velocities(means.corner)
    thickness = channel.layer_thicknesses(means.corner)
    for member, file in enumerate(files):
        fields = {
            "x_velocity": u[member],
            "y_velocity": v[member],
            "potential_vorticity": means.vorticity[member],
            "thickness": thickness[member],
        }
        for index, wave in enumerate(CHANNEL_WAVES):
            fields[wave.name] = means.tracers[member, :, index]
            fields[flux_name(wave.name, "x")] = means.flux_x[member, :, index]
            fields[flux_name(wave.name, "y")] = means.flux_y[member, :, index]
        file.write(time, fields)


def simulate_channel(
    regime: ChannelRegime,
    folder: Path,
    *,
    members: int = 12,
    snapshots: int = 40,
    spacing_days: float = SPACING_DAYS,
    spinup_days: float = SPINUP_DAYS,
    tracer_days: float = TRACER_DAYS,
    fluxes: bool = False,
    seed: int = 0,
    progress: Progress | None = None,
) -> Path:
    """Simulate one region of the channel and write its members.

    An ensemble that already stands there, complete and from the same regime, seed and
    version, is kept; anything less is made anew.

    Parameters
    ----------
    regime : ChannelRegime
    folder : Path
        Folder in which the region's own folder is made.
    members : int, optional
        Each starts from the jet and its own noise.
    snapshots : int, optional
    spacing_days : float, optional, days
        Time between snapshots.
    spinup_days, tracer_days : float, optional, days
        Time before tracers are released, and from there to the first snapshot.
    fluxes : bool, optional
        Write means over the time between snapshots instead of snapshots, and with them the
        total tracer fluxes through the faces, summed over every time step.
    seed : int, optional
    progress : callable, optional
        Called with ``(region, share done, note)`` once a simulated day.

    Returns
    -------
    Path
        The region's folder, with ``member_00.nc`` and so on.

    Raises
    ------
    SimulationError
        If the flow blows up or becomes too fast for its time step.
    InputError
        If counts or times make no sense.
    OutputError
        If the folder cannot be written or holds something else.
    """
    expect_counts(regime.name, [("members", members, 1), ("snapshots", snapshots, 1)])
    report = progress or _silent
    target = folder / regime.name
    record = {
        "regime": asdict(regime), "members": members, "snapshots": snapshots,
        "spacing_days": spacing_days, "spinup_days": spinup_days, "tracer_days": tracer_days,
        "fluxes": fluxes, "seed": seed, "targets": [asdict(wave) for wave in CHANNEL_WAVES],
        "active": [label.role for label in _active_labels(regime)],
    }  # fmt: skip
    if is_complete(target, record, members):
        report(regime.name, 1.0, "kept what is there")
        return target
    release = round(spinup_days * regime.steps_per_day)
    steps = _snapshot_steps(regime, snapshots, spinup_days + tracer_days, spacing_days)
    key = [seed, *regime.name.encode()]
    channel = Channel(regime, [np.random.default_rng([*key, member]) for member in range(members)])
    layout = _layout(
        regime, [step / regime.steps_per_day for step in steps], spacing_days if fluxes else None
    )
    stopwatch = _Stopwatch(channel, release, steps[-1], report)
    with atomic_folder(target) as temporary:
        with ExitStack() as stack:
            files = [
                stack.enter_context(MemberFile(temporary, member, layout))
                for member in range(members)
            ]
            _run_to(channel, release, stopwatch)
            channel.release_tracers(target_fields(regime))
            if fluxes:
                first = steps[0] - round(spacing_days * regime.steps_per_day)
                _run_to(channel, max(first, release), stopwatch)
            for time, step in enumerate(steps):
                if fluxes:
                    channel.start_window()
                _run_to(channel, step, stopwatch)
                write = _write_window if fluxes else _write_snapshot
                write(channel, files, time)
        write_record(temporary, record)
    report(regime.name, 1.0, f"{members} members, {snapshots} snapshots")
    return target


def simulate_regions(
    regimes: Sequence[ChannelRegime],
    folder: Path,
    *,
    members: int = 12,
    snapshots: int = 40,
    spacing_days: float = SPACING_DAYS,
    spinup_days: float = SPINUP_DAYS,
    tracer_days: float = TRACER_DAYS,
    fluxes: bool = False,
    seed: int = 0,
    workers: int = 2,
    progress: Progress | None = None,
) -> list[Path]:
    """Simulate several regions, each in a process of its own.

    Parameters
    ----------
    regimes : sequence of ChannelRegime
        Their names must differ.
    folder : Path
        Folder in which a folder for each region is made.
    members, snapshots, spacing_days, spinup_days, tracer_days, fluxes, seed
        As for `simulate_channel`.
    workers : int, optional
        Regions simulated at once; with one, no other process is started.
    progress : callable, optional
        Called in this process with ``(region, share done, note)``.

    Returns
    -------
    list of Path
        The regions' folders, in the order of the regimes.

    Raises
    ------
    SimulationError, InputError, OutputError
        As for `simulate_channel`; the other regions are then stopped.
    """
    expect_counts("simulate_regions", [("workers", workers, 1)])
    names = [regime.name for regime in regimes]
    if len(set(names)) < len(names):
        raise InputError(
            "two regions have the same name", found=", ".join(names), remedy="rename one"
        )
    jobs = {
        regime.name: partial(
            simulate_channel, regime, folder, members=members, snapshots=snapshots,
            spacing_days=spacing_days, spinup_days=spinup_days, tracer_days=tracer_days,
            fluxes=fluxes, seed=seed,
        )
        for regime in regimes
    }  # fmt: skip
    run_in_processes(jobs, workers, progress or _silent)
    return [folder / name for name in names]
