"""The last stages of a study: bundles that ship and the report page."""

from __future__ import annotations

import platform
from collections.abc import Mapping
from importlib.metadata import version
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from learnclosure import __version__
from learnclosure.export.layout import SIGNATURE_FILE
from learnclosure.stages import file_digest, fingerprint
from learnclosure.study import Study
from learnclosure.workflow import (
    Progress,
    artefacts,
    closure_digests,
    load_closures,
    load_statistics,
    read_json,
    silent,
)

if TYPE_CHECKING:
    import xarray as xr

    from learnclosure.closures.closure import Closure

FloatArray = npt.NDArray[np.float64]
TRACKED_LIBRARIES = ("numpy", "scipy", "scikit-learn", "xarray", "numba", "onnx", "onnxruntime")


def mean_state_inputs(statistics: xr.Dataset) -> dict[str, FloatArray]:
    """Compute the point inputs of one region.

    Parameters
    ----------
    statistics : xarray.Dataset
        Contents of ``statistics.nc``.

    Returns
    -------
    dict of str to ndarray, shape (layer, y, x)
        Inputs in SI units, by name.
    """
    from learnclosure.features.inputs import compute_inputs
    from learnclosure.features.mean_state import MeanState

    arrays = {str(name): np.asarray(statistics[name].values) for name in statistics.variables}
    return compute_inputs(MeanState.from_mapping(arrays, dict(statistics.attrs)))


def predict_region(closure: Closure, statistics: xr.Dataset) -> dict[str, FloatArray]:
    """Apply a closure to the mean state of one region.

    Parameters
    ----------
    closure : Closure
    statistics : xarray.Dataset

    Returns
    -------
    dict of str to ndarray, shape (layer, y, x)
        Tensor components and half-widths in m2 s-1 and trust; NaN on land.
    """
    inputs = mean_state_inputs(statistics)
    wet = np.asarray(statistics["wet_share"].values) > 0.0
    prediction = closure.predict({name: values[wet] for name, values in inputs.items()})

    def spread(values: FloatArray) -> FloatArray:
        field = np.full(wet.shape, np.nan)
        field[wet] = values
        return field

    fields: dict[str, FloatArray] = {"trust": spread(prediction.trust)}
    for number, pair in enumerate(("xx", "xy", "yx", "yy")):
        fields[f"transport_tensor_{pair}"] = spread(prediction.tensor[:, number])
        fields[f"half_width_{pair}"] = spread(prediction.half_width[:, number])
    return fields


def reference_inputs(
    statistics: Mapping[str, xr.Dataset], points: int, seed: int
) -> dict[str, FloatArray]:
    """Draw points whose inputs ship with a bundle for checking it.

    Parameters
    ----------
    statistics : mapping of str to xarray.Dataset
    points : int
        Number of points drawn over all regions without replacement.
    seed : int

    Returns
    -------
    dict of str to ndarray, shape (point,)
    """
    columns: dict[str, list[FloatArray]] = {}
    for dataset in statistics.values():
        wet = np.asarray(dataset["wet_share"].values) > 0.0
        for name, values in mean_state_inputs(dataset).items():
            columns.setdefault(name, []).append(values[wet])
    joined = {name: np.concatenate(parts) for name, parts in columns.items()}
    total = len(next(iter(joined.values())))
    drawn = np.random.default_rng(seed).permutation(total)[: min(points, total)]
    drawn.sort()
    return {name: values[drawn] for name, values in joined.items()}


def provenance(study: Study, statistics: Mapping[str, xr.Dataset]) -> dict[str, Any]:
    """Say what a closure was trained from and with.

    Parameters
    ----------
    study : Study
    statistics : mapping of str to xarray.Dataset
        Statistics of the training regions.

    Returns
    -------
    dict
        JSON-serialisable.
    """
    places = artefacts(study)
    return {
        "regions": [
            {
                "name": name,
                "members": int(dataset.attrs["members"]),
                "snapshots": int(dataset.attrs["snapshots"]),
                "eddy_definition": str(dataset.attrs["eddy_definition"]),
                "layers": int(dataset.sizes["layer"]),
                "cell_width": float(np.median(dataset["cell_width_x"].values)),
                "input_sha256": str(dataset.attrs.get("input_sha256", "")),
                "statistics_sha256": file_digest(places.statistics(name)),
            }
            for name, dataset in statistics.items()
        ],
        "seed": study.closure.seed,
        "settings": {
            "diagnosis": study.diagnosis.model_dump(mode="json"),
            "features": study.features.model_dump(mode="json"),
            "closure": study.closure.model_dump(mode="json"),
        },
        "versions": {
            "learnclosure": __version__,
            "python": platform.python_version(),
            **{name: version(name) for name in TRACKED_LIBRARIES},
        },
    }


def _bundle_files(folder: Path) -> list[Path]:
    """Return what an export wrote; a signature comes later and from elsewhere."""
    return sorted(
        path for path in folder.rglob("*") if path.is_file() and path.name != SIGNATURE_FILE
    )


def export_study(study: Study, *, progress: Progress = silent) -> None:
    """Ship each trained closure as a verified bundle.

    Parameters
    ----------
    study : Study
    progress : callable, optional

    Raises
    ------
    LearnclosureError
        If an earlier stage is missing or an exported form does not agree with the closure.
    """
    places = artefacts(study)
    evaluation = read_json(places.evaluation, "run 'learnclosure evaluate' on the study first")
    pending: dict[str, str] = {}
    for family, digest in closure_digests(study).items():
        folder = places.bundle(family)
        mark = fingerprint(
            f"export-{family}",
            {
                "settings": study.export.model_dump(mode="json"),
                "closure": digest,
                "evaluation": file_digest(places.evaluation),
            },
        )
        standing = _bundle_files(folder) if folder.is_dir() else []
        if standing and places.current(f"export-{family}", mark, standing):
            progress(f"export {family}", 1.0, "stands already")
        else:
            pending[family] = mark
    if pending:
        _export_families(study, pending, evaluation, progress)


def _export_families(
    study: Study, pending: Mapping[str, str], evaluation: Mapping[str, Any], progress: Progress
) -> None:
    """Export the families whose fingerprints are given."""
    from learnclosure.export.bundle import export_bundle
    from learnclosure.report.model_card import render_model_card

    places = artefacts(study)
    statistics = load_statistics(study)
    closures = load_closures(study)
    trained = [table.name for table in study.ensembles if table.split == "train"]
    history = provenance(study, {name: statistics[name] for name in trained})
    points = reference_inputs(statistics, study.export.reference_points, study.closure.seed)
    for family, mark in pending.items():
        progress(f"export {family}", 0.0, "")
        folder = places.bundle(family)
        export_bundle(
            closures[family],
            folder,
            provenance=history,
            evaluation=evaluation,
            reference_inputs=points,
            settings=study.export,
            render_card=render_model_card,
        )
        places.note(f"export-{family}", mark, _bundle_files(folder))
        progress(f"export {family}", 1.0, "done")


def archive_study(study: Study) -> list[Path]:
    """Pack the bundle of each family as one file beside its folder.

    Parameters
    ----------
    study : Study

    Returns
    -------
    list of Path
        The archives, named after bundle and version.

    Raises
    ------
    BundleError
        If a bundle is missing or does not pass its gate.
    OutputError
        If an archive cannot be written.
    """
    from learnclosure.export.archive import write_archive
    from learnclosure.export.gate import load_bundle

    written = []
    for family in study.closure.families:
        folder = artefacts(study).bundle(family)
        contents = load_bundle(folder)
        name, version = contents.manifest["name"], contents.manifest["version"]
        written.append(folder.with_name(f"{name}-{version}.zip"))
        write_archive(contents.files, written[-1])
    return written


def report_study(study: Study, *, progress: Progress = silent) -> Path:
    """Write the report page of a study.

    Parameters
    ----------
    study : Study
    progress : callable, optional

    Returns
    -------
    Path
        The page.

    Raises
    ------
    LearnclosureError
        If an earlier stage is missing.
    """
    places = artefacts(study)
    digests = closure_digests(study)
    evaluation = read_json(places.evaluation, "run 'learnclosure evaluate' on the study first")
    mark = fingerprint(
        "report", {"evaluation": file_digest(places.evaluation), "closures": digests}
    )
    if places.current("report", mark, [places.report]):
        progress("report", 1.0, "stands already")
        return places.report
    from learnclosure.report.page import write_report

    progress("report", 0.0, "")
    statistics = load_statistics(study)
    closures = load_closures(study)
    predictions = {
        family: {name: predict_region(closure, data) for name, data in statistics.items()}
        for family, closure in closures.items()
    }
    write_report(places.report, evaluation, statistics, predictions)
    places.note("report", mark, [places.report])
    progress("report", 1.0, "done")
    return places.report
