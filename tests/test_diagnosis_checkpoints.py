"""Runs that are stopped go on; work shared by processes gives the same bytes."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest

from diagnosis_cases import box, random_ensemble
from ensemble_files import member_dataset, run_command, write_members, write_study
from learnclosure.diagnosis import eddies, execution
from learnclosure.diagnosis.checkpoints import Checkpoint
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.eddies import Accumulation, Chunk
from learnclosure.diagnosis.execution import Execution, merged_chunks
from learnclosure.diagnosis.moment_sums import MomentState
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.errors import DiagnosisError, InputError
from learnclosure.study import EnsembleTable


def accumulation(times=20, definition="ensemble"):
    ensemble = random_ensemble(box(1, 6, 8), members=5, times=times, tracers=3)
    return Accumulation(ensemble, Coarsening(ensemble.grid, 2), definition)


def same(one, other):
    assert one.sums.keys() == other.sums.keys()
    for name, values in one.sums.items():
        np.testing.assert_array_equal(values, other.sums[name])


def test_sums_come_back_from_disk_as_they_were(tmp_path):
    made = accumulation()
    state = made.run(made.chunks()[0])
    Checkpoint(tmp_path / "sums.npz", "a").save(1, state)
    chunks, found = Checkpoint(tmp_path / "sums.npz", "a").load()
    assert chunks == 1
    assert found.fields == state.fields
    same(found, state)


@pytest.mark.parametrize("spoil", ["mark", "bytes", "nothing there"])
def test_sums_of_other_inputs_or_damaged_ones_are_not_used(tmp_path, spoil):
    path, made = tmp_path / "sums.npz", accumulation()
    Checkpoint(path, "a").save(1, made.run(made.chunks()[0]))
    if spoil == "bytes":
        path.write_bytes(path.read_bytes()[:-200])
    if spoil == "nothing there":
        path.unlink()
    assert Checkpoint(path, "b" if spoil == "mark" else "a").load()[0] == 0


def test_a_run_goes_on_where_it_was_stopped(tmp_path):
    made = accumulation()
    whole = merged_chunks(made, Execution())
    chunks = made.chunks()
    assert len(chunks) == 4
    checkpoint = Checkpoint(tmp_path / "sums.npz", "a", every=0.0)

    def stop(share):
        if share > 0.6:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        merged_chunks(made, Execution(checkpoint=checkpoint), stop)
    done, _ = checkpoint.load()
    assert 0 < done < 4
    made.source.asked.clear()
    same(merged_chunks(made, Execution(checkpoint=checkpoint)), whole)
    assert min(made.source.asked) == chunks[done].start
    checkpoint.clear()
    assert list(tmp_path.iterdir()) == []


def long_study(folder: Path) -> Path:
    write_members(folder / "north", members=5, rows=8, columns=10, times=24)
    return write_study(folder, "north", extra="[diagnosis]\nceiling_draws = 0\n")


SLOWED = """
import sys, time
from learnclosure.diagnosis import checkpoints, eddies
from learnclosure.study import read_study
from learnclosure.workflow import diagnose_study
eddies.CHUNK_TIMES = 2
own = eddies.Accumulation.run
def run(self, chunk, progress=None):
    state = own(self, chunk, progress)
    time.sleep(0.2)
    return state
eddies.Accumulation.run = run
start = checkpoints.Checkpoint.__init__
start.__defaults__ = (0.0, *start.__defaults__[1:])
diagnose_study(read_study(sys.argv[1]), workers=1)
"""


def test_a_killed_run_resumes_and_ends_with_the_same_bytes(tmp_path, monkeypatch):
    study, undisturbed = long_study(tmp_path / "a"), long_study(tmp_path / "b")
    monkeypatch.setattr(eddies, "CHUNK_TIMES", 2)
    kept = tmp_path / "a/results/stages/diagnose-north.npz"
    process = subprocess.Popen([sys.executable, "-c", SLOWED, str(study)])
    deadline = time.monotonic() + 60.0
    while not kept.exists() and time.monotonic() < deadline:
        time.sleep(0.02)
    time.sleep(0.3)
    process.send_signal(signal.SIGKILL)
    process.wait()
    assert kept.exists()
    assert not (tmp_path / "a/results/north/statistics.nc").exists()
    assert run_command("diagnose", study) == 0
    assert run_command("diagnose", undisturbed) == 0
    assert not kept.exists()
    assert list((tmp_path / "a/results/stages").glob(".*")) == []
    for name in ("statistics.nc", "features.nc"):
        one, other = (tmp_path / place / "results/north" / name for place in "ab")
        assert one.read_bytes() == other.read_bytes()


def test_processes_and_one_process_give_the_same_bytes(tmp_path):
    table = EnsembleTable(name="north", files="*.nc")
    write_members(tmp_path, members=5, rows=8, columns=10, times=12)
    with open_ensemble(table, tmp_path) as ensemble:
        for definition in ("ensemble", "time"):
            made = Accumulation(ensemble, Coarsening(ensemble.grid, 2), definition)
            alone = merged_chunks(made, Execution())
            same(merged_chunks(made, Execution(workers=2)), alone)


class Deadly:
    """An accumulation whose process dies at one chunk: once, or always."""

    def __init__(self, made: Accumulation, where: Path, *, always: bool) -> None:
        self.made, self.where, self.always = made, where, always
        self.source = made.source

    def chunks(self) -> list[Chunk]:
        """Return those of the accumulation."""
        return self.made.chunks()

    def run(self, chunk: Chunk) -> MomentState:
        """Sum a chunk, or die."""
        if chunk.start == 5 and (self.always or not self.where.exists()):
            self.where.touch()
            os.kill(os.getpid(), signal.SIGKILL)
        return self.made.run(chunk)


def test_a_killed_worker_does_not_lose_the_run(tmp_path):
    made = accumulation()
    deadly = Deadly(made, tmp_path / "died", always=False)
    same(merged_chunks(deadly, Execution(workers=2)), merged_chunks(made, Execution()))
    assert (tmp_path / "died").exists()


def test_workers_that_always_die_end_the_run(tmp_path):
    deadly = Deadly(accumulation(), tmp_path / "died", always=True)
    with pytest.raises(DiagnosisError, match=r"died again and again.*3 deaths"):
        merged_chunks(deadly, Execution(workers=2))


def test_a_dask_cluster_gives_the_same_bytes():
    distributed = pytest.importorskip("distributed")
    made = accumulation()
    with distributed.LocalCluster(
        n_workers=1, threads_per_worker=1, processes=False, dashboard_address=None
    ) as cluster:
        found = merged_chunks(made, Execution(cluster=cluster.scheduler_address))
    same(found, merged_chunks(made, Execution()))


def test_no_cluster_at_the_address(monkeypatch):
    pytest.importorskip("distributed")
    monkeypatch.setattr(execution, "PATIENCE", 0.3)
    with pytest.raises(InputError, match=r"--cluster: there is no dask scheduler.*dask scheduler"):
        merged_chunks(accumulation(), Execution(cluster="tcp://127.0.0.1:9"))


def test_regions_side_by_side_give_the_bytes_of_one_after_another(tmp_path):
    for folder in ("a", "b"):
        for number, name in enumerate(("north", "south")):
            write_members(tmp_path / folder / name, rows=8, columns=10, seed=number)
        study = write_study(
            tmp_path / folder, "north", "south", extra="[diagnosis]\nceiling_draws = 0\n"
        )
        assert run_command("diagnose", study, "--workers", 1 + (folder == "b")) == 0
    for name in ("north", "south"):
        one, other = (tmp_path / place / f"results/{name}/statistics.nc" for place in "ab")
        assert one.read_bytes() == other.read_bytes()


def test_a_zarr_store_and_files_give_the_same_moments(tmp_path):
    import xarray as xr

    from learnclosure.diagnosis.moments import accumulate_moments

    write_members(tmp_path / "files", members=4, rows=8, columns=10, times=5)
    members = [member_dataset(n, rows=8, columns=10, times=5) for n in range(4)]
    moving = [name for name, values in members[0].data_vars.items() if "time" in values.dims]
    store = members[0].drop_vars(["realization", *moving])
    for name in moving:
        store[name] = xr.concat([m[name].drop_vars("realization") for m in members], "member")
    store.to_zarr(tmp_path / "store.zarr", consolidated=False)
    found = []
    for files in ("files/*.nc", "store.zarr"):
        table = EnsembleTable(name="north", files=files)
        with open_ensemble(table, tmp_path) as ensemble:
            found.append(accumulate_moments(ensemble, Coarsening(ensemble.grid, 2)))
    for name, flux in found[0].whole.flux.items():
        np.testing.assert_array_equal(flux, found[1].whole.flux[name])
