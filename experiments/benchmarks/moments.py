"""Moments beside what one would write with xarray: in memory, from files, and their peak memory."""

from __future__ import annotations

import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from pathlib import Path

import numba
import numpy as np
import xarray as xr
from threadpoolctl import threadpool_limits

import learnclosure as lc
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.execution import Execution
from learnclosure.diagnosis.kernels import add_moments
from learnclosure.diagnosis.moment_layout import Layout, rows_of
from learnclosure.diagnosis.moments import accumulate_moments
from learnclosure.ensemble.grid import Geometry, Grid
from learnclosure.study import parse_study

MEMBERS, LAYERS, ROWS, COLUMNS = 24, 2, 512, 512
VELOCITIES = ("x_velocity", "y_velocity")
TRACERS = ("dye_a", "dye_b", "dye_c", "dye_d")
REPEATS = 3


def seconds(work: Callable[[], object], clock: Callable[[], float] = time.process_time) -> float:
    """Shortest of several runs, after one that does not count."""
    work()
    times = []
    for _ in range(REPEATS):
        start = clock()
        work()
        times.append(clock() - start)
    return min(times)


def grid_of(rows: int, columns: int, layers: int = LAYERS) -> Grid:
    wet, one = np.ones((layers, rows, columns), bool), np.ones((rows, columns))
    return Grid(
        x=5e3 * np.arange(columns),
        y=5e3 * np.arange(rows),
        geometry=Geometry(5e3 * one, 5e3 * one, wet, True, False),
        layer_thickness=1e3 * wet,
        reduced_gravity=0.02 * np.ones((layers - 1, rows, columns)),
        coriolis_parameter=1e-4 * one,
        planetary_beta_x=0.0 * one,
        planetary_beta_y=2e-11 * one,
        sea_floor_depth=1e3 * layers * one,
        vertical="layers",
    )


class InMemory:
    """An ensemble in memory whose times are all alike."""

    name, split, units, has_buoyancy = "memory", "train", {}, False
    tracers, withheld_tracers, assumptions = TRACERS, (), ()
    active, left_out_gradients = (), {}
    times = np.arange(8.0)

    def __init__(self, fields: dict[str, np.ndarray]) -> None:
        self.grid = grid_of(ROWS, COLUMNS)
        self.member_labels = tuple(range(MEMBERS))
        self._fields = fields

    def fields(self, time: int) -> dict[str, np.ndarray]:
        """Return what every time holds."""
        del time
        return self._fields


@numba.njit(fastmath=True)
def total(values: np.ndarray) -> float:
    found = np.float32(0.0)
    for number in range(values.size):
        found += values[number]
    return found


def covariances_only(
    fields: dict[str, np.ndarray], grid: Grid, factor: int
) -> Callable[[], object]:
    """Ask the kernel for no more than its rivals give: fluxes of all members, on blocks."""
    layout = Layout(TRACERS, (), VELOCITIES, (), (), "even")
    lines, alive = rows_of(fields, layout.fields)
    plan = layout.plan(MEMBERS, factor, split=False)
    pairs = len(TRACERS) * len(VELOCITIES)
    plan = plan._replace(
        kept_fields=0, kept_pairs=0, pair_lead=plan.pair_lead[:pairs],
        pair_field=plan.pair_field[:pairs],
    )  # fmt: skip
    area = np.where(grid.geometry.mask, grid.geometry.area, 0.0)
    space = (LAYERS, ROWS // factor, COLUMNS // factor)
    whole = np.zeros((2 + len(layout.fields) + pairs, *space))
    unused = np.zeros((2, *whole.shape)), np.zeros((1, 1, *space)), np.zeros((1, 1, *space))

    def work() -> object:
        assert alive
        return add_moments(lines, plan, area, 0, whole, *unused)

    return work


def in_memory() -> None:
    random = np.random.default_rng(0)
    shape = (MEMBERS, LAYERS, ROWS, COLUMNS)
    fields = {
        name: random.standard_normal(shape, dtype=np.float32) for name in (*VELOCITIES, *TRACERS)
    }
    arrays = {
        name: xr.DataArray(values, dims=("member", "layer", "y", "x"))
        for name, values in fields.items()
    }

    def anomalies() -> list[xr.DataArray]:
        return [
            (
                (arrays[axis] - arrays[axis].mean("member"))
                * (arrays[name] - arrays[name].mean("member"))
            ).sum("member") / (MEMBERS - 1)
            for axis in VELOCITIES
            for name in TRACERS
        ]  # fmt: skip

    def products() -> list[xr.DataArray]:
        return [
            (arrays[axis] * arrays[name]).mean("member")
            - arrays[axis].mean("member") * arrays[name].mean("member")
            for axis in VELOCITIES
            for name in TRACERS
        ]

    source = InMemory(fields)
    size = sum(values.nbytes for values in fields.values()) / 1e9
    reading = seconds(lambda: [total(values.ravel()) for values in fields.values()])
    bare = seconds(covariances_only(fields, source.grid, 2))
    whole = seconds(lambda: accumulate_moments(source, Coarsening(source.grid, 2)))
    whole /= len(source.times)
    one, other = seconds(anomalies), seconds(products)
    print(f"in memory, {size:.2f} GB; seconds of one thread")
    print(f"  reading every number: {reading:.3f} ({size / reading:.1f} GB/s)")
    print(f"  xarray, anomalies: {one:.3f}; mean of products: {other:.3f}")
    for name, found in (("fluxes alone", bare), ("all moments, a time", whole)):
        print(
            f"  {name}: {found:.3f}; {one / found:.1f} and {other / found:.1f} times faster, "
            f"{reading / found:.0%} of the reading rate"
        )


def load_with_xarray(folder: Path) -> None:
    for path in sorted(folder.glob("*.nc")):
        with xr.open_dataset(path, engine="h5netcdf", decode_times=False) as dataset:
            dataset.load()


def from_files(folder: Path) -> None:
    text = f'[[ensemble]]\nname = "region"\nfiles = "{folder.resolve()}/*.nc"\n'
    study = parse_study(text)

    def moments(workers: int = 1) -> None:
        with lc.open_ensemble(study.ensembles[0], study.folder) as ensemble:
            accumulate_moments(ensemble, Coarsening(ensemble.grid, 2), execution=Execution(workers))

    loading, summing = seconds(lambda: load_with_xarray(folder)), seconds(moments)
    print(f"from files: moments {summing:.2f} s, {summing / loading:.2f} of loading with xarray")
    alone, shared = (seconds(lambda n=n: moments(n), time.perf_counter) for n in (1, 2))
    print(f"  by the clock {alone:.1f} s; two workers {alone / shared:.2f} times as fast as one")


def named(standard_name: str, units: str) -> dict[str, str]:
    return {"standard_name": standard_name, "units": units}


def write_many(folder: Path, members: int, times: int = 4) -> None:
    rows = columns = 256
    for number in range(members):
        random = np.random.default_rng(number)
        data = {
            name: (
                ("time", "layer", "y", "x"),
                random.standard_normal((times, LAYERS, rows, columns), dtype=np.float32),
                {"units": "m s-1", "standard_name": f"sea_water_{name}"}
                if name in VELOCITIES
                else {"units": "1", "tracer_role": "inversion"},
            )
            for name in (*VELOCITIES, *TRACERS)
        }
        data["layer_thickness"] = ("layer", [500.0] * LAYERS, named("cell_thickness", "m"))
        data["reduced_gravity"] = ("interface", [0.02] * (LAYERS - 1), {"units": "m s-2"})
        one = np.ones((rows, columns))
        data["sea_floor_depth"] = (
            ("y", "x"), 1e3 * one, named("sea_floor_depth_below_geoid", "m"),
        )  # fmt: skip
        data["coriolis_parameter"] = (
            ("y", "x"), 1e-4 * one, named("coriolis_parameter", "s-1"),
        )  # fmt: skip
        coordinates = {
            "x": ("x", 5e3 * np.arange(columns), {"units": "m", "axis": "X"}),
            "y": ("y", 5e3 * np.arange(rows), {"units": "m", "axis": "Y"}),
            "time": (
                "time",
                5.0 * np.arange(times),
                {"units": "days since 2000-01-01", "axis": "T"},
            ),
        }
        attributes = {"periodic": "", "vertical": "layers", "planetary_beta": 2e-11}
        dataset = xr.Dataset(data, coordinates, attributes)
        dataset.to_netcdf(folder / f"member_{number:03d}.nc", engine="h5netcdf")


PEAK = """
import resource, sys
import learnclosure as lc
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.moments import accumulate_moments
from learnclosure.study import parse_study
study = parse_study('[[ensemble]]\\nname = "region"\\nfiles = "' + sys.argv[1] + '/*.nc"\\n')
with lc.open_ensemble(study.ensembles[0], study.folder) as ensemble:
    accumulate_moments(ensemble, Coarsening(ensemble.grid, 4))
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024)
"""


def memory() -> None:
    peaks = []
    for members in (12, 192):
        with tempfile.TemporaryDirectory() as folder:
            write_many(Path(folder), members)
            found = subprocess.run(
                [sys.executable, "-c", PEAK, folder], capture_output=True, text=True, check=True
            )
            peaks.append(float(found.stdout))
    print(f"peak memory: {peaks[0]:.0f} MB with 12 members, {peaks[1]:.0f} MB with 192")


if __name__ == "__main__":
    with threadpool_limits(limits=1):
        in_memory()
        for name in sys.argv[1:]:
            from_files(Path(name))
        with tempfile.TemporaryDirectory() as folder:
            write_many(Path(folder), 12, 64)
            from_files(Path(folder))
        memory()
