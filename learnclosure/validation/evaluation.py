"""The evidence: every score of every closure and baseline, beside what noise allows."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from learnclosure.closures.closure import Closure
from learnclosure.closures.table import Table, table_from_statistics
from learnclosure.errors import TrainingError
from learnclosure.study import ClosureSettings, ValidationSettings
from learnclosure.validation.audit import audit
from learnclosure.validation.audit_inputs import AuditRegion
from learnclosure.validation.baseline_records import (
    BOUNDS,
    baseline_record,
    bound_record,
    region_record,
)
from learnclosure.validation.folds import Fold, FoldKind, make_folds
from learnclosure.validation.out_of_fold import (
    Candidate,
    Progress,
    Task,
    carry_out,
    gather,
    one_thread,
    silent,
)
from learnclosure.validation.records import plain
from learnclosure.validation.scores import COMPONENTS, ceiling_scores
from learnclosure.validation.table_scores import pooled_scores, region_scores
from learnclosure.validation.truth import FluxTruth, flux_truth

if TYPE_CHECKING:
    import xarray as xr

FloatArray = npt.NDArray[np.float64]
Record = dict[str, Any]

SCHEMA = "1"
REFITTED: tuple[FoldKind, ...] = ("random", "blocked")
"""Folds whose scores are not known yet from choosing the closure."""
FITTING_SHARE = 0.8


def _split(statistics: Mapping[str, xr.Dataset], split: str) -> list[xr.Dataset]:
    return [data for data in statistics.values() if str(data.attrs.get("split")) == split]


def ceiling_record(truth: FluxTruth, statistics: xr.Dataset) -> Record | None:
    """Score the tensor of an independent half of the members.

    Parameters
    ----------
    truth : FluxTruth
    statistics : xarray.Dataset

    Returns
    -------
    dict or None
        ``flux_r2``, ``divergence_r2`` and the split-half reliability of each component,
        one value a layer; None with fewer than four members.
    """
    scores = ceiling_scores(truth)
    if scores is None:
        return None
    reliability = {
        pair: np.asarray(statistics[f"reliability_transport_tensor_{pair}"].values)
        for pair in COMPONENTS
        if f"reliability_transport_tensor_{pair}" in statistics
    }
    return {**scores, "component_reliability": reliability}


def _fold_scores(
    table: Table,
    truths: Mapping[str, FluxTruth],
    folds: Mapping[FoldKind, Sequence[Fold]],
    closures: Mapping[str, Closure],
    settings: ClosureSettings,
    progress: Progress,
) -> dict[str, dict[str, Record]]:
    """Refit each family's closure without every random and blocked fold, and score it."""
    places = [(family, kind) for family in closures for kind in REFITTED]
    tasks = [
        Task(
            family,
            (Candidate(closures[family].regressor, closures[family].target),),
            fold,
            closures[family].features,
        )
        for family, kind in places
        for fold in folds[kind]
    ]
    answers = iter(
        carry_out(table, tasks, settings, progress=progress, note=f"{len(tasks)} folds refitted")
    )
    scores: dict[str, dict[str, Record]] = {family: {} for family in closures}
    for family, kind in places:
        parts = [next(answers)[0] for _ in folds[kind]]
        tensor = gather(table, folds[kind], parts).tensor
        scores[family][kind] = pooled_scores(table, tensor, truths)
    return scores


def _family_record(
    closure: Closure,
    selection: Mapping[str, Any],
    folds: Mapping[str, Record],
    held_out: Table | None,
    truths: Mapping[str, FluxTruth],
) -> Record:
    known = selection["out_of_fold"]
    regions = {
        region: region_record("train", scores) for region, scores in known["regions"].items()
    }
    if held_out is not None:
        with one_thread():
            prediction = closure.predict(held_out.inputs)
        for region in held_out.regions:
            scores = region_scores(
                held_out,
                prediction.tensor,
                truths[region],
                half_width=prediction.half_width,
                trust=prediction.trust,
            )
            regions[region] = region_record("test", scores)
    return {
        "chosen": selection["chosen"],
        "rule": selection["rule"],
        "selection": selection["selection"],
        "folds": {**folds, "region": known["pooled"]},
        "regions": regions,
        "half_width": None if closure.half_widths_ is None else closure.half_widths_.as_record(),
    }


def _audit_regions(tables: Sequence[Table], truths: Mapping[str, FluxTruth]) -> list[AuditRegion]:
    shared = [name for name in tables[0].inputs if all(name in part.inputs for part in tables)]
    regions = []
    for table in tables:
        for region in table.regions:
            part = table.select(table.region == region)
            inputs = {name: part.inputs[name] for name in shared}
            geometry = truths[region].geometry
            regions.append(AuditRegion(region, inputs, part.layer, part.row, part.column, geometry))
    return regions


def _audit_record(
    closure: Closure, regions: Sequence[AuditRegion], settings: ClosureSettings
) -> list[Record]:
    with one_thread():
        checks = audit(closure, regions, floor=settings.floor, cap=settings.cap, seed=settings.seed)
    return [check.as_record() for check in checks]


def _study_record(statistics: Mapping[str, xr.Dataset], truths: Mapping[str, FluxTruth]) -> Record:
    return {
        "regions": {
            name: {
                "split": str(data.attrs.get("split", "")),
                "members": int(data.attrs.get("members", 0)),
                "snapshots": int(data.attrs.get("snapshots", 0)),
                "tracers_scored": list(truths[name].tracers),
                "scored_against": ("full ensemble" if truths[name].half_flux is None else "halves"),
            }
            for name, data in statistics.items()
        },
        "test_regions": (
            "scored once, by the final closure; they take no part in choosing, fitting or "
            "calibrating it"
        ),
        "train_regions": "scored out of fold, each by a closure that has not seen it",
    }


def evaluate(
    statistics: Mapping[str, xr.Dataset],
    closures: Mapping[str, Closure],
    selections: Mapping[str, Mapping[str, Any]],
    closure_settings: ClosureSettings,
    validation_settings: ValidationSettings,
    progress: Progress = silent,
) -> Record:
    """Score closures on folds and held-out regions, beside baselines and ceiling, and audit them.

    Parameters
    ----------
    statistics : mapping of str to xarray.Dataset
        Of every region; the attribute ``split`` says which were trained on.
    closures : mapping of str to Closure
        By family, fitted to the training regions.
    selections : mapping of str to mapping
        ``Selection.as_record()`` of each family.
    closure_settings : ClosureSettings
    validation_settings : ValidationSettings
    progress : callable, optional
        Called with ``(share done, note)``.

    Returns
    -------
    dict
        JSON-safe contents of ``evaluation.json``; floats have six significant digits and
        undefined scores are None.

    Raises
    ------
    TrainingError
        If no region is a training region or a family has no selection.
    """
    missing = [family for family in closures if family not in selections]
    if missing:
        raise TrainingError(
            "how the closure was chosen is not known",
            where=f"family {missing[0]}",
            remedy="run 'learnclosure train' on the study again",
        )
    by_name = {str(data.attrs["region"]): data for data in statistics.values()}
    truths = {name: flux_truth(data) for name, data in by_name.items()}
    table = table_from_statistics(_split(statistics, "train"))
    tests = _split(statistics, "test")
    held_out = table_from_statistics(tests) if tests else None
    folds: dict[FoldKind, Sequence[Fold]] = {
        kind: make_folds(
            kind,
            table.region,
            table.row,
            table.column,
            folds=validation_settings.folds,
            block_cells=validation_settings.block_cells,
            seed=closure_settings.seed,
        )
        for kind in (*REFITTED, "region")
    }
    fold_scores = _fold_scores(
        table,
        truths,
        folds,
        closures,
        closure_settings,
        lambda share, note: progress(FITTING_SHARE * share, note),
    )
    baselines = {
        name: (
            bound_record(name, table, held_out, truths, by_name)
            if name in BOUNDS
            else baseline_record(name, table, held_out, folds, truths)
        )
        for name in validation_settings.baselines
    }
    progress(FITTING_SHARE, "audit")
    regions = _audit_regions([table] if held_out is None else [table, held_out], truths)
    record: Record = plain(
        {
            "schema": SCHEMA,
            "study": _study_record(by_name, truths),
            "tracers_scored": (
                "withheld" if all(truth.withheld for truth in truths.values()) else "all"
            ),
            "families": {
                family: _family_record(
                    closure, selections[family], fold_scores[family], held_out, truths
                )
                for family, closure in closures.items()
            },
            "baselines": {name: made for name, made in baselines.items() if made is not None},
            "ceiling": {
                name: ceiling_record(truth, by_name[name]) for name, truth in truths.items()
            },
            "audit": {
                family: _audit_record(closure, regions, closure_settings)
                for family, closure in closures.items()
            },
        }
    )
    progress(1.0, "done")
    return record
