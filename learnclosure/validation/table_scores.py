"""All scores of tensors predicted for the points of a table, region by region and pooled."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.closures.table import Table
from learnclosure.validation.scores import (
    Scores,
    amplitude_log_error,
    component_r2,
    flux_scores,
    half_width_coverage,
    mean_score,
    weighted_mean,
)
from learnclosure.validation.truth import FluxTruth

FloatArray = npt.NDArray[np.float64]


def region_scores(
    table: Table,
    tensor: FloatArray,
    truth: FluxTruth,
    *,
    half_width: FloatArray | None = None,
    trust: FloatArray | None = None,
) -> Scores:
    """Score the tensors predicted for one region.

    Parameters
    ----------
    table : Table
        May hold other regions as well.
    tensor : ndarray, shape (point, 4), m2 s-1
        Prediction for every point of the table.
    truth : FluxTruth
        Says which region.
    half_width : ndarray, shape (point, 4), m2 s-1, optional
    trust : ndarray, shape (point,), optional

    Returns
    -------
    dict
        One value a layer for each score.
    """
    here = table.region == truth.region
    layer, weight = table.layer[here], table.weight[here]
    field = np.moveaxis(table.unflatten(tensor, truth.region), -1, 0)
    scores: Scores = {
        **flux_scores(field, truth),
        "component_r2": component_r2(tensor[here], table.tensor[here], layer, weight),
        "amplitude_log_error": amplitude_log_error(tensor[here], table.tensor[here], layer, weight),
    }
    if half_width is not None:
        scores["half_width_coverage"] = half_width_coverage(
            tensor[here], table.tensor[here], half_width[here], layer, weight
        )
    if trust is not None:
        scores["trust_mean"] = weighted_mean(trust[here], layer, weight)
    return scores


def pooled_scores(
    table: Table, tensor: FloatArray, truths: Mapping[str, FluxTruth]
) -> dict[str, Any]:
    """Score out-of-fold tensors over all regions of a table.

    Components are scored over all points together; fluxes and divergences in each region,
    then averaged over regions.

    Parameters
    ----------
    table : Table
    tensor : ndarray, shape (point, 4), m2 s-1
    truths : mapping of str to FluxTruth
        For every region of the table.

    Returns
    -------
    dict
        ``component_r2``, ``flux_r2`` and ``divergence_r2``, one value a layer.
    """
    by_region = [
        flux_scores(np.moveaxis(table.unflatten(tensor, region), -1, 0), truths[region])
        for region in table.regions
    ]
    known = np.isfinite(tensor).all(axis=1)
    return {
        "component_r2": component_r2(
            tensor[known], table.tensor[known], table.layer[known], table.weight[known]
        ),
        **{
            name: layer_means([scores[name] for scores in by_region])
            for name in ("flux_r2", "divergence_r2")
        },
    }


def layer_means(scores: list[list[float]]) -> list[float]:
    """Average lists of layer scores; regions with fewer layers count where they have one.

    Parameters
    ----------
    scores : list of list of float
        Layer scores of each region.

    Returns
    -------
    list of float
    """
    return [
        mean_score([values[layer] for values in scores if layer < len(values)])
        for layer in range(max(len(values) for values in scores))
    ]
