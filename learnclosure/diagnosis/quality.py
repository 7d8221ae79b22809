"""What the artefact says of how far a transport tensor can be believed."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.diagnosis.artefact import StatisticsBuilder
from learnclosure.diagnosis.budget import (
    SMOOTHING_FACTORS,
    ErrorBudget,
    error_budget,
    jackknife_calibration,
    smoothing_check,
)
from learnclosure.diagnosis.estimate import Estimator, Form, GroupEstimate, WithheldSkill
from learnclosure.diagnosis.moments import EnsembleSource, GroupMoments
from learnclosure.diagnosis.relaxation import without_relaxation
from learnclosure.diagnosis.tensor import COMPONENTS
from learnclosure.errors import DiagnosisError

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

HIGH_CONDITION = 5.0
HIGH_LEVERAGE = 1.0
LEAST_HALF_AMPLITUDE = 0.95
NOTEWORTHY_SHARE = 0.05


def tensor_components(tensor: FloatArray) -> dict[str, FloatArray]:
    """Split tensors, shape (..., 2, 2), into components by name (xx, xy, yx, yy)."""
    return {name: tensor[..., a, b] for a, b, name in COMPONENTS}


def add_quality(
    builder: StatisticsBuilder,
    ensemble: EnsembleSource,
    estimator: Estimator,
    whole: GroupEstimate,
    halves: tuple[GroupEstimate, ...],
    valid: BoolArray,
) -> None:
    """Add leverages, the halves' tensors and their reliabilities.

    Parameters
    ----------
    builder : StatisticsBuilder
    ensemble : EnsembleSource
    estimator : Estimator
    whole : GroupEstimate
    halves : tuple of GroupEstimate
        Two, or none.
    valid : ndarray of bool, shape (layer, y, x)

    Raises
    ------
    DiagnosisError
        If the leverage of a tracer is wanted that the ensemble does not have.
    """
    named = estimator.inversion.settings.leverage_tracers
    wanted = ensemble.withheld_tracers if named is None else named
    for name in wanted:
        if name not in whole.acted_on:
            raise DiagnosisError(
                "there is no such tracer",
                where=f"region '{ensemble.name}': leverage_tracers",
                found=name,
                expected=f"one of {', '.join(whole.acted_on)}",
                remedy="name tracers of the ensemble",
            )
    for name, values in estimator.leverages(whole, wanted).items():
        builder.add(
            f"leverage_{name}", values, ("layer", "y", "x"),
            f"leverage of the mean gradient of {name} in the inversion", "1",
        )  # fmt: skip
    if not halves:
        return
    for a, b, name in COMPONENTS:
        builder.add_named(
            f"transport_tensor_{name}",
            np.where(
                valid,
                np.stack([half.smooth.tensor[..., a, b] for half in halves]),
                np.nan,
            ),
            "_halves",
            "of each half of the members,",
        )
    reliability = estimator.component_reliability(halves, valid)
    for a, b, name in COMPONENTS:
        builder.add(
            f"reliability_transport_tensor_{name}", reliability[a, b], ("layer",),
            f"split-half reliability of the {name} component of the transport tensor", "1",
            references="Spearman 1910 and Brown 1910, British Journal of Psychology 3",
        )  # fmt: skip
    builder.add(
        "reliability_flux", estimator.flux_reliability(halves, valid), ("layer",),
        "split-half reliability of the eddy fluxes, mean over tracers", "1",
    )  # fmt: skip


def add_budget(
    builder: StatisticsBuilder,
    ensemble: EnsembleSource,
    estimator: Estimator,
    whole: GroupEstimate,
    halves: tuple[GroupEstimate, ...],
    valid: BoolArray,
    error: FloatArray | None,
) -> None:
    """Add the error budget, its table, and how far jackknife and smoothing hold.

    Parameters
    ----------
    builder : StatisticsBuilder
    ensemble : EnsembleSource
    estimator : Estimator
    whole : GroupEstimate
    halves : tuple of GroupEstimate
        Two, or none.
    valid : ndarray of bool, shape (layer, y, x)
    error : ndarray or None, shape (layer, y, x, 2, 2), m2 s-1
        Jackknife standard error.
    """
    weights = np.where(valid, estimator.area, 0.0)
    budget = error_budget(estimator, whole, halves)
    _add_budget_fields(builder, budget, valid)
    parts = {
        "sampling": error,
        "smoothing": budget.smoothing,
        "gradient noise": budget.attenuation,
        "misfit": budget.misfit,
    }
    known = {name: field for name, field in parts.items() if field is not None}
    builder.coordinates["error_source_name"] = xr.Variable(
        ("error_source",), np.array(list(known), dtype=object), {"long_name": "source of error"}
    )
    for a, b, name in COMPONENTS:
        rows = [_root_mean_square(field[..., a, b], weights) for field in known.values()]
        builder.add(
            f"error_budget_{name}", np.stack(rows), ("error_source", "layer"),
            f"root-mean-square error of the {name} component of the transport tensor", "m2 s-1",
        )  # fmt: skip
    if halves and error is not None:
        calibration = jackknife_calibration(halves, error, weights)
        for a, b, name in COMPONENTS:
            builder.add(
                f"jackknife_calibration_{name}", calibration[:, a, b], ("layer",),
                f"spread between halves of the members over what the standard error of the "
                f"{name} component says", "1",
            )  # fmt: skip
    if halves:
        traces = [
            np.sum(weights * np.trace(part.smooth.tensor, axis1=-2, axis2=-1), axis=(1, 2))
            for part in (*halves, whole)
        ]
        builder.add(
            "half_amplitude_ratio", 0.5 * (traces[0] + traces[1]) / traces[2], ("layer",),
            "trace of the transport tensor from half the members over that from all", "1",
        )  # fmt: skip
    negative = np.sum(weights * whole.smooth.negative, axis=(1, 2))
    builder.add(
        "negative_share", negative / np.maximum(weights.sum(axis=(1, 2)), 1.0), ("layer",),
        "share of the area where an eigenvalue would be negative without the floor", "1",
    )  # fmt: skip
    if ensemble.withheld_tracers:
        length = estimator.inversion.settings.smoothing_length
        builder.coordinates["smoothing_length"] = xr.Variable(
            ("smoothing_length",), length * np.array(SMOOTHING_FACTORS),
            {"long_name": "length over which the tensor is kept smooth", "units": "m"},
        )  # fmt: skip
        builder.add(
            "smoothing_check",
            smoothing_check(estimator, whole, ensemble.withheld_tracers, valid),
            ("smoothing_length", "layer"),
            "coefficient of determination of eddy fluxes of withheld tracers, by smoothing length",
            "1",
        )


def _add_budget_fields(builder: StatisticsBuilder, budget: ErrorBudget, valid: BoolArray) -> None:
    companions = {
        "_smoothing_bias": (budget.smoothing, "bias by smoothing of the"),
        "_gradient_noise_bias": (budget.attenuation, "bias by noisy mean gradients of the"),
        "_misfit_error": (budget.misfit, "standard error by unexplained fluxes of the"),
    }
    for suffix, (field, about) in companions.items():
        if field is None:
            continue
        for name, values in tensor_components(field).items():
            builder.add_named(
                f"transport_tensor_{name}", np.where(valid, values, np.nan), suffix, about
            )
    if budget.noise_share is not None:
        builder.add(
            "gradient_noise_share", np.where(valid, budget.noise_share, np.nan),
            ("layer", "y", "x"),
            "share of the variance of the mean tracer gradients that is sampling noise", "1",
        )  # fmt: skip


def add_relaxation(
    builder: StatisticsBuilder, whole: GroupEstimate, moments: GroupMoments, seconds: float,
    valid: BoolArray,
) -> None:  # fmt: skip
    """Add the tensor freed of the bias that relaxing the tracers brings.

    Parameters
    ----------
    builder : StatisticsBuilder
    whole : GroupEstimate
    moments : GroupMoments
        Of all members; holds the covariance of the velocities.
    seconds : float, s
        Time in which tracers are relaxed.
    valid : ndarray of bool, shape (layer, y, x)
    """
    pairs = {
        name: moments.covariance[f"{name[0]}_velocity", f"{name[1]}_velocity"]
        for name in ("xx", "xy", "yy")
    }
    covariance = np.stack(
        [np.stack([pairs["xx"], pairs["xy"]], -1), np.stack([pairs["xy"], pairs["yy"]], -1)], -2
    )
    found = without_relaxation(whole.smooth.tensor, covariance, seconds)
    kept = valid & found.possible
    for name, values in tensor_components(found.tensor).items():
        builder.add_named(
            f"transport_tensor_{name}", np.where(kept, values, np.nan), "_without_relaxation",
            "freed of the bias by tracer relaxation, the",
        )  # fmt: skip
    builder.add(
        "relaxation_amplification", np.where(kept, found.amplification, np.nan),
        ("layer", "y", "x"),
        "bound on the growth of errors by the correction for tracer relaxation", "1",
    )  # fmt: skip


def _root_mean_square(field: FloatArray, weights: FloatArray) -> FloatArray:
    known = np.isfinite(field) & (weights > 0.0)
    weight = np.where(known, weights, 0.0)
    total = weight.sum(axis=(1, 2))
    square = (weight * np.where(known, field, 0.0) ** 2).sum(axis=(1, 2))
    return np.where(total > 0.0, np.sqrt(square / np.where(total > 0.0, total, 1.0)), np.nan)


def cautions(statistics: xr.Dataset) -> list[str]:
    """Say in words where the diagnosis is weak.

    Parameters
    ----------
    statistics : xarray.Dataset
        What the diagnosis found.

    Returns
    -------
    list of str
        One sentence each, without a full stop; empty where nothing is noteworthy.
    """
    said = []
    wet = statistics["wet_share"].values > 0.0
    condition = statistics["condition_number"].values[wet]
    high = float(np.mean(~(condition <= HIGH_CONDITION)))
    if high > NOTEWORTHY_SHARE:
        said.append(
            f"the mean tracer gradients have a condition number above {HIGH_CONDITION:g} "
            f"in {high:.0%} of the sea cells"
        )
    for name in statistics.variables:
        if str(name).startswith("leverage_"):
            values = statistics[name].values[wet]
            share = float(np.mean(~(values <= HIGH_LEVERAGE)))
            if share > NOTEWORTHY_SHARE:
                tracer = str(name).removeprefix("leverage_")
                said.append(
                    f"the leverage of {tracer} exceeds {HIGH_LEVERAGE:g} in {share:.0%} "
                    "of the sea cells"
                )
    for name, limit, sentence in (
        ("negative_share", NOTEWORTHY_SHARE,
         "the floor holds up negative eigenvalues in {:.0%} of layer {}"),
        ("half_amplitude_ratio", LEAST_HALF_AMPLITUDE,
         "half of the members give only {:.0%} of the tensor's trace in layer {}: noise in "
         "the mean gradients makes it too small"),
    ):  # fmt: skip
        if name not in statistics:
            continue
        for layer, value in enumerate(np.atleast_1d(statistics[name].values)):
            poor = value > limit if name == "negative_share" else value < limit
            if poor:
                said.append(sentence.format(value, layer + 1))
    return said


def add_skill(
    builder: StatisticsBuilder,
    skill: WithheldSkill | None,
    other_form: Form,
    other: WithheldSkill | None,
) -> None:
    """Add the skill on tracers left out, of the tensor, of least squares and of the other form.

    Parameters
    ----------
    builder : StatisticsBuilder
    skill : WithheldSkill or None
    other_form : {"local", "memory"}
        Form of the tensor that was not chosen.
    other : WithheldSkill or None
        Its skill.
    """
    if skill is None or other is None:
        return
    builder.coordinates["withheld_tracer"] = xr.Variable(
        ("withheld",), np.array(skill.tracers, dtype=object), {"long_name": "tracer left out"}
    )
    columns = {
        "withheld_flux_skill": (skill.flux, "eddy fluxes", "the transport tensor"),
        "withheld_divergence_skill": (
            skill.divergence, "flux divergences", "the transport tensor",
        ),
        "withheld_divergent_flux_skill": (
            skill.divergent_flux, "divergent parts of eddy fluxes", "the transport tensor",
        ),
        "least_squares_withheld_divergent_flux_skill": (
            skill.least_squares_divergent_flux, "divergent parts of eddy fluxes",
            "plain least squares",
        ),
        "least_squares_withheld_flux_skill": (
            skill.least_squares_flux, "eddy fluxes", "plain least squares",
        ),
        "least_squares_withheld_divergence_skill": (
            skill.least_squares_divergence, "flux divergences", "plain least squares",
        ),
        f"{other_form}_withheld_flux_skill": (
            other.flux, "eddy fluxes", f"the transport tensor in its {other_form} form",
        ),
        f"{other_form}_withheld_divergence_skill": (
            other.divergence, "flux divergences", f"the transport tensor in its {other_form} form",
        ),
    }  # fmt: skip
    for name, (values, what, which) in columns.items():
        builder.add(
            name, values, ("withheld", "layer"),
            f"coefficient of determination of {what} of tracers left out, by {which}", "1",
        )  # fmt: skip
