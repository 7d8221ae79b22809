"""The report page: one file, everything in it, nothing loaded from elsewhere."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr
from jinja2 import Environment, PackageLoader, StrictUndefined

from learnclosure import __version__
from learnclosure.atomic import atomic_path
from learnclosure.report import figures, tables
from learnclosure.report.active import active_rows
from learnclosure.report.cautions import CAUTIONS, NOT_FOR
from learnclosure.report.ceiling_figure import ceiling_curves
from learnclosure.report.summary import findings

FloatArray = npt.NDArray[np.float64]
Predictions = Mapping[str, Mapping[str, Mapping[str, FloatArray]]]

SECTIONS = (
    ("found", "What was found"),
    ("scores", "Scores"),
    ("folds", "Folds and choice"),
    ("tensor", "Tensor"),
    ("flux", "Fluxes"),
    ("diagnosis", "Diagnosis"),
    ("audit", "Audit"),
    ("cautions", "Cautions"),
)


def _shown_region(evaluation: Mapping[str, Any], statistics: Mapping[str, xr.Dataset]) -> str:
    """Region that is drawn: a held-out one if there is one."""
    for record in evaluation["families"].values():
        for region, found in record["regions"].items():
            if found["split"] == "test" and region in statistics:
                return str(region)
    return next(iter(statistics))


def _half_width_note(evaluation: Mapping[str, Any]) -> str:
    for record in evaluation["families"].values():
        half_width = record.get("half_width") or {}
        text = half_width.get("guarantee") or half_width.get("meaning")
        if text:
            return f"{str(text)[:1].upper()}{str(text)[1:].removesuffix('.')}."
    return ""


def render_report(
    evaluation: Mapping[str, Any],
    statistics: Mapping[str, xr.Dataset],
    predictions: Predictions,
) -> str:
    """Render the report of a study.

    Parameters
    ----------
    evaluation : mapping
        Contents of ``evaluation.json``.
    statistics : mapping of str to xarray.Dataset
        Statistics by region.
    predictions : mapping of str to mapping
        By family and region, fields on (layer, y, x): ``transport_tensor_xx`` and so on,
        ``half_width_xx`` and so on in m2 s-1, ``trust``.

    Returns
    -------
    str
        One HTML document with everything in it; the same for the same contents.
    """
    shown = _shown_region(evaluation, statistics)
    data = statistics[shown]
    here = {family: fields[shown] for family, fields in predictions.items() if shown in fields}
    withheld = evaluation.get("tracers_scored") == "withheld"
    context = {
        "title": ", ".join(statistics),
        "version": __version__,
        "sections": SECTIONS,
        "found": findings(evaluation),
        "scored": "of tracers never used in an inversion" if withheld else "of all tracers",
        "score_pictures": [
            figures.score_chart(evaluation, "flux_r2", "eddy fluxes"),
            figures.score_chart(evaluation, "divergence_r2", "flux divergences"),
        ],
        "score_rows": tables.score_rows(evaluation),
        "fold_kinds": tables.FOLD_KINDS,
        "fold_rows": tables.fold_rows(evaluation),
        "component_rows": tables.component_rows(evaluation),
        "selection_rows": tables.selection_rows(evaluation),
        "pairs": tables.PAIRS,
        "tensor_pictures": [
            figures.tensor_maps(shown, data),
            *(
                figures.prediction_maps(shown, data, here, part)
                for part in ("Sxx", "Syy", "Sxy", "alpha")
            ),
        ],
        "flux_pictures": [figures.flux_maps(shown, data, here)],
        "diagnosis_rows": tables.diagnosis_rows(statistics),
        "ceiling_picture": ceiling_curves(shown, data),
        "active_rows": active_rows(statistics),
        "diagnosis_cautions": tables.diagnosis_cautions(statistics),
        "audit_rows": tables.audit_rows(evaluation),
        "half_width_note": _half_width_note(evaluation),
        "coverage_rows": tables.coverage_rows(evaluation),
        "trust_pictures": [figures.trust_map(shown, data, here)],
        "cautions": CAUTIONS,
        "not_for": NOT_FOR,
        "eddies": f"Eddies: {data.attrs.get('eddy_definition', 'not stated')}.",
    }
    environment = Environment(
        loader=PackageLoader("learnclosure.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
    )
    return environment.get_template("report.html.j2").render(context)


def write_report(
    path: Path,
    evaluation: Mapping[str, Any],
    statistics: Mapping[str, xr.Dataset],
    predictions: Predictions,
) -> None:
    """Render the report and write it atomically.

    Parameters
    ----------
    path : Path
    evaluation, statistics, predictions
        As for ``render_report``.

    Raises
    ------
    OutputError
        If it cannot be written.
    """
    page = render_report(evaluation, statistics, predictions)
    with atomic_path(path) as temporary:
        temporary.write_text(page, encoding="utf-8")
