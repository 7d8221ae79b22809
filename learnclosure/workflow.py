"""The stages of a study in order, each resumable and callable on its own.

Each stage reads artefacts, writes one kind of artefact and records what it was made
from; a stage whose inputs are unchanged is not run again.
"""

from __future__ import annotations

import json
import os
from collections.abc import Callable, Mapping
from functools import partial
from pathlib import Path
from typing import TYPE_CHECKING, Any

from learnclosure.atomic import atomic_path, prepare_folder
from learnclosure.errors import InputError, TrainingError
from learnclosure.simulate.processes import run_in_processes
from learnclosure.stages import Artefacts, file_digest, fingerprint
from learnclosure.study import EnsembleTable, Study

if TYPE_CHECKING:
    import xarray as xr

    from learnclosure.closures.closure import Closure

Progress = Callable[[str, float, str], None]
"""Called with the name of a task, the share done (0 to 1) and a short note."""


def silent(task: str, share: float, note: str) -> None:
    """Report nothing: the default progress of every stage."""


def artefacts(study: Study) -> Artefacts:
    """Return where the artefacts of a study lie."""
    return Artefacts(study.output_folder)


def _sources_mark(study: Study, table: EnsembleTable) -> list[list[str | int]]:
    from learnclosure.ensemble.sources import find_files

    marks: list[list[str | int]] = []
    for path in find_files(table, study.folder):
        members = sorted(path.rglob("*")) if path.is_dir() else [path]
        for member in members:
            if member.is_file():
                state = member.stat()
                marks.append([str(member), state.st_size, state.st_mtime_ns])
    return marks


def _diagnose_region(
    study: Study,
    table: EnsembleTable,
    mark: str,
    *,
    workers: int = 1,
    cluster: str | None = None,
    progress: Progress = silent,
) -> None:
    """Diagnose one region, going on from what a stopped run has left."""
    from learnclosure.diagnosis.artefact import write_statistics
    from learnclosure.diagnosis.checkpoints import Checkpoint
    from learnclosure.diagnosis.diagnose import diagnose
    from learnclosure.diagnosis.execution import Execution
    from learnclosure.ensemble.reader import open_ensemble
    from learnclosure.features.artefact import write_features

    places, task = artefacts(study), f"diagnose {table.name}"
    checkpoint = Checkpoint(places.checkpoint(table.name), mark)
    with open_ensemble(table, study.folder) as ensemble:
        statistics = diagnose(
            ensemble,
            study.diagnosis,
            progress=lambda share, note: progress(task, 0.99 * share, note),
            execution=Execution(workers, cluster, checkpoint),
        )
    write_statistics(statistics, places.statistics(table.name))
    write_features(statistics, places.features(table.name))
    places.note(f"diagnose-{table.name}", mark, _diagnosed(places, table))
    checkpoint.clear()
    progress(task, 1.0, "done")


def _diagnosed(places: Artefacts, table: EnsembleTable) -> list[Path]:
    return [places.statistics(table.name), places.features(table.name)]


def diagnose_study(
    study: Study, *, progress: Progress = silent, workers: int = 2, cluster: str | None = None
) -> None:
    """Compute eddy statistics, transport tensors and features of every region.

    A run that was stopped goes on from where it was, and ends with the same bytes.

    Parameters
    ----------
    study : Study
    progress : callable, optional
        Called with ``(region, share done, note)``.
    workers : int, optional
        Processes: regions are worked on side by side, and several share a single one. One
        that dies is replaced.
    cluster : str, optional
        Address of a dask scheduler whose workers sum the moments, one region after another.

    Raises
    ------
    InputError
        If an ensemble cannot be read or cannot carry a tensor.
    """
    places = artefacts(study)
    prepare_folder(places.root)
    jobs: dict[str, Callable[..., None]] = {}
    for table in study.ensembles:
        mark = fingerprint(
            "diagnose",
            {
                "ensemble": table.model_dump(mode="json"),
                "settings": study.diagnosis.model_dump(mode="json"),
                "sources": _sources_mark(study, table),
            },
        )
        if places.current(f"diagnose-{table.name}", mark, _diagnosed(places, table)):
            progress(f"diagnose {table.name}", 1.0, "stands already")
        else:
            jobs[table.name] = partial(_diagnose_region, study, table, mark)
            progress(f"diagnose {table.name}", 0.0, "")
    if cluster is not None or len(jobs) <= 1:
        for job in jobs.values():
            job(progress=progress, workers=workers, cluster=cluster)
        return
    run_in_processes(jobs, workers, progress, attempts=3)


def load_statistics(study: Study, split: str | None = None) -> dict[str, xr.Dataset]:
    """Load the diagnosed statistics of a study's regions.

    Parameters
    ----------
    study : Study
    split : {"train", "test"}, optional
        Only regions of this split.

    Returns
    -------
    dict of str to xarray.Dataset

    Raises
    ------
    TrainingError
        If a region has not been diagnosed yet.
    """
    import xarray as xr

    loaded: dict[str, xr.Dataset] = {}
    for region, path in _statistics_paths(study, split).items():
        with xr.open_dataset(path, engine="h5netcdf") as dataset:
            loaded[region] = dataset.load()
    return loaded


def _statistics_paths(study: Study, split: str | None = None) -> dict[str, Path]:
    """Paths of the statistics of all regions of a split, which must be there."""
    places = artefacts(study)
    paths = {
        table.name: places.statistics(table.name)
        for table in study.ensembles
        if split is None or table.split == split
    }
    for path in paths.values():
        if not path.is_file():
            raise TrainingError(
                "the region has not been diagnosed",
                where=path,
                remedy="run 'learnclosure diagnose' on the study first",
            )
    return paths


def closure_digests(study: Study) -> dict[str, str]:
    """Return the digest of each family's trained closure.

    Parameters
    ----------
    study : Study

    Returns
    -------
    dict of str to str

    Raises
    ------
    TrainingError
        If a family has not been trained yet.
    """
    places = artefacts(study)
    for family in study.closure.families:
        if not places.closure(family).is_file():
            raise TrainingError(
                "the family has not been trained",
                where=places.closure(family),
                remedy="run 'learnclosure train' on the study first",
            )
    return {family: file_digest(places.closure(family)) for family in study.closure.families}


def load_closures(study: Study) -> dict[str, Closure]:
    """Load the trained closures of a study.

    Parameters
    ----------
    study : Study

    Returns
    -------
    dict of str to Closure
        Keyed by family.

    Raises
    ------
    TrainingError
        If a family has not been trained yet.
    """
    import joblib

    places = artefacts(study)
    return {family: joblib.load(places.closure(family)) for family in closure_digests(study)}


def _statistics_digests(study: Study, split: str | None = None) -> dict[str, str]:
    return {name: file_digest(path) for name, path in _statistics_paths(study, split).items()}


def train_study(study: Study, *, progress: Progress = silent) -> None:
    """Choose and fit one closure for each family of the study.

    Parameters
    ----------
    study : Study
    progress : callable, optional
        Called with ``(family, share done, note)``.

    Raises
    ------
    TrainingError
        If a region has not been diagnosed or the table cannot be trained from.
    """
    places = artefacts(study)
    pending: dict[str, str] = {}
    for family in study.closure.families:
        stage = f"train-{family}"
        mark = fingerprint(
            stage,
            {
                "closure": study.closure.model_dump(mode="json"),
                "features": study.features.model_dump(mode="json"),
                "validation": study.validation.model_dump(mode="json"),
                "statistics": _statistics_digests(study, "train"),
            },
        )
        outputs = [places.closure(family), places.selection(family)]
        if places.current(stage, mark, outputs):
            progress(f"train {family}", 1.0, "stands already")
        else:
            pending[family] = mark
    if pending:
        _train_families(study, pending, progress)


def _train_families(study: Study, pending: Mapping[str, str], progress: Progress) -> None:
    """Train the families whose fingerprints are given."""
    import joblib

    from learnclosure.closures.table import table_from_statistics
    from learnclosure.validation.selection import select_closure

    places = artefacts(study)
    statistics = load_statistics(study, "train")
    table = table_from_statistics(list(statistics.values()))
    for family, mark in pending.items():

        def family_progress(share: float, note: str, family: str = family) -> None:
            progress(f"train {family}", share, note)

        closure, selection = select_closure(
            table,
            statistics,
            family,
            study.closure,
            study.validation,
            progress=family_progress,
            features=study.features,
        )
        with atomic_path(places.closure(family)) as temporary:
            joblib.dump(closure, temporary)
        write_json(places.selection(family), selection.as_record())
        places.note(f"train-{family}", mark, [places.closure(family), places.selection(family)])
        progress(f"train {family}", 1.0, "done")


def write_json(path: Path, record: Mapping[str, Any]) -> None:
    """Write a JSON document atomically, with sorted keys and a final newline.

    Parameters
    ----------
    path : Path
    record : mapping

    Raises
    ------
    OutputError
        If it cannot be written.
    """
    text = json.dumps(record, indent=1, sort_keys=True, allow_nan=False)
    with atomic_path(path) as temporary:
        temporary.write_text(text + "\n", encoding="utf-8")


def read_json(path: Path, remedy: str) -> dict[str, Any]:
    """Read a JSON artefact.

    Parameters
    ----------
    path : Path
    remedy : str
        What to do if it is missing or unreadable.

    Returns
    -------
    dict

    Raises
    ------
    InputError
        If it is missing or not a JSON object.
    """
    try:
        record = json.loads(path.read_text(encoding="utf-8"))
    except OSError:
        raise InputError("does not exist or cannot be read", where=path, remedy=remedy) from None
    except ValueError:
        raise InputError("is not a JSON document", where=path, remedy=remedy) from None
    if not isinstance(record, dict):
        raise InputError("is not a JSON object", where=path, remedy=remedy)
    return record


def evaluate_study(study: Study, *, progress: Progress = silent) -> dict[str, Any]:
    """Score the closures of a study, beside ceiling and baselines, and audit them.

    Parameters
    ----------
    study : Study
    progress : callable, optional

    Returns
    -------
    dict
        The contents of ``evaluation.json``.

    Raises
    ------
    TrainingError
        If a region or family is missing.
    """
    places = artefacts(study)
    mark = fingerprint(
        "evaluate",
        {
            "closure": study.closure.model_dump(mode="json"),
            "validation": study.validation.model_dump(mode="json"),
            "statistics": _statistics_digests(study),
            "splits": {table.name: table.split for table in study.ensembles},
            "closures": closure_digests(study),
        },
    )
    remedy = "run 'learnclosure evaluate' on the study first"
    if places.current("evaluate", mark, [places.evaluation]):
        progress("evaluate", 1.0, "stands already")
        return read_json(places.evaluation, remedy)
    from learnclosure.validation.evaluation import evaluate

    statistics = load_statistics(study)
    closures = load_closures(study)
    selections = {
        family: read_json(places.selection(family), "run 'learnclosure train' again")
        for family in closures
    }
    record = evaluate(
        statistics,
        closures,
        selections,
        study.closure,
        study.validation,
        progress=lambda share, note: progress("evaluate", share, note),
    )
    write_json(places.evaluation, record)
    places.note("evaluate", mark, [places.evaluation])
    progress("evaluate", 1.0, "done")
    return record


def failed_checks(evaluation: Mapping[str, Any]) -> list[str]:
    """List the audit checks that did not pass, as ``family: check``."""
    return [
        f"{family}: {check['check']}"
        for family, checks in evaluation["audit"].items()
        for check in checks
        if not check["passed"]
    ]


def run_study(
    study: Study,
    *,
    progress: Progress = silent,
    workers: int | None = None,
    cluster: str | None = None,
) -> None:
    """Run every stage of a study, from ensembles to bundles and report.

    Parameters
    ----------
    study : Study
    progress : callable, optional
    workers : int, optional
        Processes that diagnose; by default two, or one on a single core.
    cluster : str, optional
        Address of a dask scheduler whose workers sum the moments.

    Raises
    ------
    LearnclosureError
        If a stage cannot be carried out.
    """
    from learnclosure.delivery import export_study, report_study

    workers = workers or min(2, os.cpu_count() or 1)
    diagnose_study(study, progress=progress, workers=workers, cluster=cluster)
    train_study(study, progress=progress)
    evaluate_study(study, progress=progress)
    export_study(study, progress=progress)
    report_study(study, progress=progress)
