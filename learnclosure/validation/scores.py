"""Scores of predicted transport tensors: components, fluxes, divergences, amplitude, coverage.

Every score takes its weights explicitly and is given layer by layer. A layer in which a
score is undefined (no points, no variance) has the score NaN.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.skill import divergence_skill, flux_skill
from learnclosure.ensemble.grid import divergence
from learnclosure.validation.truth import FloatArray, FluxTruth, down_gradient_flux, interior

COMPONENTS = ("xx", "xy", "yx", "yy")

Scores = dict[str, Any]
LayerScores = list[float]


def r_squared(predicted: FloatArray, true: FloatArray, weights: FloatArray) -> float:
    """Share of the weighted variance of the truth that a prediction explains.

    ``1 - sum w (p - t)^2 / sum w (t - <t>)^2`` with the weighted mean ``<t>``; the
    Nash-Sutcliffe efficiency (Nash and Sutcliffe 1970, J. Hydrol. 10, 282-290).

    Parameters
    ----------
    predicted, true : ndarray, shape (point,)
        In the same units.
    weights : ndarray, shape (point,)
        Non-negative weights.

    Returns
    -------
    float
        1 for a perfect prediction, 0 for the mean, NaN if the truth has no variance.

    Examples
    --------
    >>> import numpy as np
    >>> truth = np.array([1.0, 2.0, 3.0])
    >>> r_squared(truth, truth, np.ones(3)), r_squared(np.full(3, 2.0), truth, np.ones(3))
    (1.0, 0.0)
    """
    total = weights.sum()
    if total <= 0.0:
        return float("nan")
    mean = (weights * true).sum() / total
    variance = (weights * (true - mean) ** 2).sum()
    if variance <= 0.0:
        return float("nan")
    return float(1.0 - (weights * (predicted - true) ** 2).sum() / variance)


def component_r2(
    predicted: FloatArray, true: FloatArray, layer: npt.NDArray[Any], weights: FloatArray
) -> dict[str, LayerScores]:
    """Score each tensor component on the model's axes, layer by layer.

    Parameters
    ----------
    predicted, true : ndarray, shape (point, 4), m2 s-1
        Components xx, xy, yx, yy.
    layer : ndarray of int, shape (point,)
    weights : ndarray, shape (point,)

    Returns
    -------
    dict of str to list of float
        Keys xx, xy, yx, yy; one value for each layer that occurs, in order.
    """
    scores: dict[str, LayerScores] = {name: [] for name in COMPONENTS}
    for number in np.unique(layer):
        here = layer == number
        for column, name in enumerate(COMPONENTS):
            scores[name].append(
                r_squared(predicted[here, column], true[here, column], weights[here])
            )
    return scores


def amplitude_log_error(
    predicted: FloatArray, true: FloatArray, layer: npt.NDArray[Any], weights: FloatArray
) -> LayerScores:
    """Natural logarithm of the predicted over the true domain-mean trace, layer by layer.

    Parameters
    ----------
    predicted, true : ndarray, shape (point, 4), m2 s-1
    layer : ndarray of int, shape (point,)
    weights : ndarray, shape (point,)

    Returns
    -------
    list of float
        0 is the right amplitude, 0.1 about 10 % too much; NaN if a mean trace is not positive.
    """
    errors: LayerScores = []
    for number in np.unique(layer):
        here = layer == number
        weight = weights[here]
        given, wanted = (
            float((weight * (tensor[here, 0] + tensor[here, 3])).sum())
            for tensor in (predicted, true)
        )
        positive = given > 0.0 and wanted > 0.0
        errors.append(float(np.log(given / wanted)) if positive else float("nan"))
    return errors


def half_width_coverage(
    predicted: FloatArray,
    true: FloatArray,
    half_width: FloatArray,
    layer: npt.NDArray[Any],
    weights: FloatArray,
) -> dict[str, LayerScores]:
    """Share of the area on which the truth lies within the half-width of the prediction.

    Parameters
    ----------
    predicted, true, half_width : ndarray, shape (point, 4), m2 s-1
    layer : ndarray of int, shape (point,)
    weights : ndarray, shape (point,)

    Returns
    -------
    dict of str to list of float
        Keys xx, xy, yx, yy; one value for each layer that occurs, in order.
    """
    covered = np.abs(predicted - true) <= half_width
    return {
        name: weighted_mean(covered[:, column].astype(np.float64), layer, weights)
        for column, name in enumerate(COMPONENTS)
    }


def weighted_mean(values: FloatArray, layer: npt.NDArray[Any], weights: FloatArray) -> LayerScores:
    """Weighted mean of a point quantity, layer by layer.

    Parameters
    ----------
    values, weights : ndarray, shape (point,)
    layer : ndarray of int, shape (point,)

    Returns
    -------
    list of float
        One value for each layer that occurs, in order; NaN where the weights vanish.
    """
    means: LayerScores = []
    for number in np.unique(layer):
        here = layer == number
        total = weights[here].sum()
        means.append(
            float((weights[here] * values[here]).sum() / total) if total > 0.0 else float("nan")
        )
    return means


def _skill(
    predicted: FloatArray, true: FloatArray, weights: FloatArray, truth: FluxTruth
) -> tuple[LayerScores, LayerScores]:
    """Flux and divergence skill of (tracer, 2, layer, y, x) fluxes."""

    def spread(flux: FloatArray) -> FloatArray:
        return divergence(flux[:, 0], flux[:, 1], truth.geometry)

    of_flux = flux_skill(predicted, true, weights)
    inner = interior(weights, truth.geometry)
    of_divergence = divergence_skill(spread(predicted), spread(true), inner)
    return [float(value) for value in of_flux], [float(value) for value in of_divergence]


def flux_scores(tensor: FloatArray, truth: FluxTruth) -> Scores:
    """Score the fluxes and divergences a tensor field makes of the mean gradients.

    The flux ``-K grad C`` is compared with the eddy flux of each half of the members, and
    both halves are scored together: the same question an independent half's tensor is
    asked, so that the two scores compare. The gradient is that of the full ensemble's mean,
    the smooth mean a host carries; the noise of a half's own mean gradient would count
    against large diffusivities, however right they are.

    Parameters
    ----------
    tensor : ndarray, shape (4, layer, y, x), m2 s-1
        Not finite where nothing is predicted; such cells are not scored.
    truth : FluxTruth

    Returns
    -------
    dict
        ``flux_r2`` and ``divergence_r2`` against the halves (against the full ensemble if
        there are no halves), ``flux_r2_full`` and ``divergence_r2_full`` against the full
        ensemble; one value a layer.
    """
    weights = np.where(np.isfinite(tensor).all(axis=0), truth.weights, 0.0)
    predicted = down_gradient_flux(tensor, truth.gradient)
    flux_full, divergence_full = _skill(predicted, truth.flux, weights, truth)
    flux_halves, divergence_halves = flux_full, divergence_full
    if truth.half_flux is not None:
        flux_halves, divergence_halves = _skill(
            np.concatenate([predicted] * len(truth.half_flux)),
            np.concatenate(list(truth.half_flux)),
            weights,
            truth,
        )
    return {
        "flux_r2": flux_halves,
        "divergence_r2": divergence_halves,
        "flux_r2_full": flux_full,
        "divergence_r2_full": divergence_full,
    }


def ceiling_scores(truth: FluxTruth) -> Scores | None:
    """Score the tensor of each half of the members on the fluxes of the other half.

    The difference between the halves is sampling noise, so a closure that scores the same
    is as good as another ensemble of half the size.

    Parameters
    ----------
    truth : FluxTruth

    Returns
    -------
    dict or None
        ``flux_r2`` and ``divergence_r2``, one value a layer; None without halves.
    """
    if truth.half_tensor is None or truth.half_flux is None:
        return None
    others = truth.half_tensor[::-1]
    known = np.isfinite(truth.half_tensor).all(axis=(0, 1))
    weights = np.where(known, truth.weights, 0.0)
    predicted = [down_gradient_flux(tensor, truth.gradient) for tensor in others]
    flux, spread = _skill(
        np.concatenate(predicted), np.concatenate(list(truth.half_flux)), weights, truth
    )
    return {"flux_r2": flux, "divergence_r2": spread}


def mean_score(values: Sequence[float]) -> float:
    """Mean of scores over layers or regions; those that are undefined are left out.

    Parameters
    ----------
    values : sequence of float

    Returns
    -------
    float
        NaN if none is defined.
    """
    defined = [value for value in values if np.isfinite(value)]
    return float(np.mean(defined)) if defined else float("nan")
