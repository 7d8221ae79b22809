"""Scores of the classical closures, made like those of the learned ones."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from learnclosure.closures import baselines as classical
from learnclosure.closures.baselines import Baseline
from learnclosure.closures.table import Table
from learnclosure.validation.folds import Fold, FoldKind
from learnclosure.validation.table_scores import pooled_scores, region_scores
from learnclosure.validation.truth import FluxTruth

if TYPE_CHECKING:
    import xarray as xr

FloatArray = npt.NDArray[np.float64]
Record = dict[str, Any]

BASELINES: dict[str, tuple[type[Baseline], bool]] = {
    name + suffix: (kind, published)
    for name, kind in classical.BASELINES.items()
    for suffix, published in (("", False), ("-published", True))
    if not published or kind.published_constant is not None
}
"""Baselines by the name they are reported under, and whether their constant is published."""

BOUNDS = ("constant-tuned", "local-scalar")
"""Diffusivities that are told the truth of the region they are scored on: bounds of what
others of their form can reach, and no rivals."""


def _baseline_tensor(baseline: Baseline, table: Table) -> FloatArray:
    parts = baseline.tensor(np, table.inputs)
    return np.column_stack([np.broadcast_to(part, len(table)) for part in parts])


def baseline_record(
    name: str,
    table: Table,
    held_out: Table | None,
    folds: Mapping[FoldKind, Sequence[Fold]],
    truths: Mapping[str, FluxTruth],
) -> Record | None:
    """Fit one baseline wherever the learned closures are fitted, and score it the same way.

    Parameters
    ----------
    name : str
        Key of ``BASELINES``.
    table : Table
        Points of the training regions.
    held_out : Table or None
        Points of the test regions.
    folds : mapping of str to sequence of Fold
        By kind.
    truths : mapping of str to FluxTruth
        For every region.

    Returns
    -------
    dict or None
        None where the regions lack an input it needs.
    """
    kind, published = BASELINES[name]
    tables = [table] if held_out is None else [table, held_out]
    if any(needed not in part.inputs for part in tables for needed in kind.required):
        return None
    out_of_fold: dict[FoldKind, FloatArray] = {}
    for fold_kind, parts in folds.items():
        tensor = np.full((len(table), 4), np.nan)
        for fold in parts:
            fitted = kind(published=published).fit(table.select(fold.train))
            tensor[fold.test] = _baseline_tensor(fitted, table.select(fold.test))
        out_of_fold[fold_kind] = tensor
    final = kind(published=published).fit(table)
    regions = {
        region: region_record("train", region_scores(table, out_of_fold["region"], truths[region]))
        for region in table.regions
    }
    if held_out is not None:
        tensor = _baseline_tensor(final, held_out)
        for region in held_out.regions:
            regions[region] = region_record("test", region_scores(held_out, tensor, truths[region]))
    return {
        "family": kind.family,
        "parameters": final.parameters(),
        "folds": {
            fold_kind: pooled_scores(table, tensor, truths)
            for fold_kind, tensor in out_of_fold.items()
        },
        "regions": regions,
    }


def tuned_constant(truth: FluxTruth) -> FloatArray:
    """Return the diffusivity of each layer that fits the fluxes scored best.

    Parameters
    ----------
    truth : FluxTruth

    Returns
    -------
    ndarray, shape (layer, y, x), m2 s-1
        ``-sum w J . grad C / sum w |grad C|^2`` over the layer, each tracer weighted by
        the inverse variance of its flux, which makes the flux R2 largest; not below zero.
    """
    weight = truth.weights[None, None]
    axes = (1, 3, 4)
    total = np.maximum(truth.weights.sum(axis=(1, 2), keepdims=True), 1e-300)
    mean = (weight * truth.flux).sum(axis=(3, 4), keepdims=True) / total
    variance = np.sum(weight * (truth.flux - mean) ** 2, axis=axes)
    share = 1.0 / np.where(variance > 0.0, variance, np.inf)
    against = np.sum(weight * truth.flux * truth.gradient, axis=axes)
    square = np.sum(weight * truth.gradient**2, axis=axes)
    below = (share * square).sum(axis=0)
    constant = -(share * against).sum(axis=0) / np.where(below > 0.0, below, 1.0)
    spread = np.ones(truth.weights.shape)
    return np.asarray(np.maximum(constant, 0.0)[:, None, None] * spread)


def bound_record(
    name: str,
    table: Table,
    held_out: Table | None,
    truths: Mapping[str, FluxTruth],
    statistics: Mapping[str, xr.Dataset],
) -> Record | None:
    """Score a diffusivity that is told the truth of each region.

    Parameters
    ----------
    name : str
        One of ``BOUNDS``: the best constant of each layer and region, or the scalar that
        fits the fluxes of the tracers of the inversion best in each cell.
    table : Table
        Points of the training regions.
    held_out : Table or None
        Points of the test regions.
    truths : mapping of str to FluxTruth
        For every region.
    statistics : mapping of str to xarray.Dataset
        For every region.

    Returns
    -------
    dict or None
        As ``baseline_record``, of the family ``diagnosed``; None where the statistics do
        not hold the local scalar.
    """
    regions: Record = {}
    for part, split in ((table, "train"), (held_out, "test")):
        if part is None:
            continue
        for region in part.regions:
            if name == "constant-tuned":
                field = tuned_constant(truths[region])
            elif "scalar_diffusivity" in statistics[region]:
                field = np.asarray(statistics[region]["scalar_diffusivity"].values)
            else:
                return None
            values = np.full(len(part), np.nan)
            here = part.region == region
            values[here] = field[part.layer[here], part.row[here], part.column[here]]
            tensor = np.column_stack([values, 0.0 * values, 0.0 * values, values])
            scores = region_scores(part, tensor, truths[region])
            regions[region] = {**region_record(split, scores), "out_of_sample": False}
    return {"family": "diagnosed", "parameters": {}, "folds": {}, "regions": regions}


def region_record(split: str, scores: Mapping[str, Any]) -> Record:
    """Record the scores of a region that took no part in the fit.

    Parameters
    ----------
    split : {"train", "test"}
    scores : mapping

    Returns
    -------
    dict
    """
    return {"split": split, "out_of_sample": True, "scores": dict(scores)}
