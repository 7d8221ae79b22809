"""Ratios of the main stages to what they cannot do without, in one run on one thread."""

from __future__ import annotations

import resource
import sys
import time
from collections.abc import Callable
from pathlib import Path

import numpy as np
import xarray as xr
from threadpoolctl import threadpool_limits

import learnclosure as lc
from learnclosure.delivery import mean_state_inputs
from learnclosure.export.runtime import open_session, run_session
from learnclosure.study import parse_study

REPEATS = 3


def median_seconds(work: Callable[[], object], repeats: int = REPEATS) -> float:
    times = []
    for _ in range(repeats):
        start = time.process_time()
        work()
        times.append(time.process_time() - start)
    return float(np.median(times))


def load_with_xarray(folder: Path) -> None:
    for path in sorted(folder.glob("*.nc")):
        with xr.open_dataset(path, engine="h5netcdf", decode_times=False) as dataset:
            dataset.load()


def diagnose(study: lc.Study) -> xr.Dataset:
    with lc.open_ensemble(study.ensembles[0], study.folder) as ensemble:
        return lc.diagnose(ensemble, study.diagnosis)


def main(folder: Path) -> None:
    study = parse_study(
        f'[[ensemble]]\nname = "{folder.name}"\nfiles = "{folder.resolve()}/*.nc"\n'
    )
    statistics = diagnose(study)
    loading = median_seconds(lambda: load_with_xarray(folder))
    diagnosing = median_seconds(lambda: diagnose(study))
    print(f"diagnose / load with xarray: {diagnosing / loading:.2f} ({diagnosing:.2f} s CPU)")
    table = lc.table_from_statistics([statistics])
    for regressor in ("ridge", "extra-trees", "histogram-boosting", "mlp"):
        closure = lc.Closure("local-energy", regressor, "linear", study.closure).fit(table)
        session = open_session(lc.build_graph(closure).SerializeToString())
        fields = mean_state_inputs(statistics)
        inputs = {name: fields[name].ravel() for name in closure.inputs_}
        own = median_seconds(lambda closure=closure, inputs=inputs: closure.predict(inputs))
        graph = median_seconds(lambda session=session, inputs=inputs: run_session(session, inputs))
        points = len(next(iter(inputs.values())))
        print(
            f"{regressor}: graph / Python {graph / own:.2f} "
            f"({1e6 * graph / points:.2f} us a point at batch {points})"
        )
    peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024
    print(f"peak memory: {peak:.0f} MB")


if __name__ == "__main__":
    with threadpool_limits(limits=1):
        main(Path(sys.argv[1]))
