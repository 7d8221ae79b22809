"""Rows of the report's tables, in words and rounded numbers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import xarray as xr

from learnclosure.diagnosis.artefact import cautions_of

PAIRS = ("xx", "xy", "yx", "yy")
FOLD_KINDS = ("random", "blocked", "region")
MISSING = "–"
MOST_LAYERS = 3
"""Of more layers than this only the ends and the mean are written."""


def layers(values: Sequence[Any] | None, digits: int = 2) -> str:
    """Write one number a layer, from the top; of many layers the ends and the mean."""
    if values is None:
        return MISSING
    written = [
        MISSING if value is None or not np.isfinite(value) else f"{value:.{digits}f}"
        for value in values
    ]
    if len(written) <= MOST_LAYERS:
        return " / ".join(written)
    known = [value for value in values if value is not None and np.isfinite(value)]
    mean = f"{np.mean(known):.{digits}f}" if known else MISSING
    return f"{written[0]} … {written[-1]}, mean {mean}"


def number(value: Any) -> str:
    """Write a number of unknown size."""
    return MISSING if value is None else f"{value:.3g}"


def score_rows(evaluation: Mapping[str, Any]) -> list[dict[str, str]]:
    """Tabulate scores of every region: closures, baselines, ceiling.

    Parameters
    ----------
    evaluation : mapping
        Contents of ``evaluation.json``.

    Returns
    -------
    list of dict
    """
    rows = []
    for region, ceiling in evaluation["ceiling"].items():
        groups = (("own", evaluation["families"]), ("", evaluation["baselines"]))
        for kind, records in groups:
            for name, record in records.items():
                found = record["regions"].get(region)
                if found is None:
                    continue
                scores = found["scores"]
                role = "held out" if found.get("split") == "test" else "out of fold"
                rows.append(
                    {
                        "kind": kind,
                        "region": f"{region}, {role}" if kind else region,
                        "name": name,
                        "flux": layers(scores.get("flux_r2")),
                        "divergence": layers(scores.get("divergence_r2")),
                        "full": layers(scores.get("flux_r2_full")),
                        "amplitude": layers(scores.get("amplitude_log_error")),
                    }
                )
        rows.append(
            {
                "kind": "ceiling",
                "region": region,
                "name": "tensor of an independent half"
                if ceiling
                else "tensor of an independent half (fewer than four members: not known)",
                "flux": layers((ceiling or {}).get("flux_r2")),
                "divergence": layers((ceiling or {}).get("divergence_r2")),
                "full": MISSING,
                "amplitude": MISSING,
            }
        )
    return rows


def fold_rows(evaluation: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Tabulate random, blocked and region folds side by side."""
    rows = []
    for kind, records in (("own", evaluation["families"]), ("", evaluation["baselines"])):
        for name, record in records.items():
            folds = record.get("folds", {})
            cells = [
                layers(folds.get(fold, {}).get(measure))
                for measure in ("flux_r2", "divergence_r2")
                for fold in FOLD_KINDS
            ]
            rows.append({"kind": kind, "name": name, "cells": cells})
    return rows


def component_rows(evaluation: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Tabulate component scores of region folds."""
    rows = []
    for family, record in evaluation["families"].items():
        components = record.get("folds", {}).get("region", {}).get("component_r2", {})
        rows.append({"name": family, "cells": [layers(components.get(pair)) for pair in PAIRS]})
    return rows


def selection_rows(evaluation: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Tabulate all candidates, best first, and mark the chosen one."""
    rows = []
    for family, record in evaluation["families"].items():
        chosen = (record["chosen"]["regressor"], record["chosen"]["target"])
        candidates = sorted(record.get("selection", []), key=lambda one: -one["flux_r2_mean"])
        rows += [
            {
                "family": family,
                "regressor": one["regressor"],
                "target": one["target"],
                "flux": layers(one["flux_r2"], 3),
                "mean": f"{one['flux_r2_mean']:.3f}",
                "chosen": (one["regressor"], one["target"]) == chosen,
            }
            for one in candidates
        ]
    return rows


def audit_rows(evaluation: Mapping[str, Any]) -> list[dict[str, Any]]:
    """Tabulate the audit."""
    return [
        {
            "family": family,
            "check": check["check"],
            "passed": check["passed"],
            "value": number(check["value"]),
            "limit": number(check["limit"]),
            "meaning": check["meaning"],
        }
        for family, checks in evaluation["audit"].items()
        for check in checks
    ]


def coverage_rows(evaluation: Mapping[str, Any]) -> list[list[str]]:
    """Tabulate how often half-widths cover the diagnosed tensor, and the mean trust."""
    rows = []
    for family, record in evaluation["families"].items():
        for region, found in record["regions"].items():
            scores = found["scores"]
            covered = scores.get("half_width_coverage") or {}
            cells = [layers(covered.get(pair)) for pair in PAIRS]
            rows.append([family, region, *cells, layers(scores.get("trust_mean"))])
    return rows


def diagnosis_rows(statistics: Mapping[str, xr.Dataset]) -> list[list[str]]:
    """Tabulate skill and reliability of the diagnosis itself."""

    def mean(dataset: xr.Dataset, name: str) -> str:
        if name not in dataset:
            return MISSING
        values = np.asarray(dataset[name].values, dtype=float)
        return layers((values.mean(axis=0) if values.ndim == 2 else values).tolist())

    names = (
        "withheld_flux_skill",
        "least_squares_withheld_flux_skill",
        "withheld_divergence_skill",
        "least_squares_withheld_divergence_skill",
        "reliability_flux",
        "reliability_transport_tensor_xx",
        "reliability_transport_tensor_yy",
    )
    return [
        [
            region,
            str(int(dataset.attrs["members"])),
            str(int(dataset.attrs["snapshots"])),
            *(mean(dataset, name) for name in names),
        ]
        for region, dataset in statistics.items()
    ]


def diagnosis_cautions(statistics: Mapping[str, xr.Dataset]) -> list[str]:
    """Say for each region where its diagnosis is weak.

    Parameters
    ----------
    statistics : mapping of str to xarray.Dataset

    Returns
    -------
    list of str
    """
    return [f"{name}: {said}" for name, data in statistics.items() for said in cautions_of(data)]
