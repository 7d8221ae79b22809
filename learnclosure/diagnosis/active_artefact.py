"""The active side of the diagnosis in ``statistics.nc``."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.active_quantities import ACTIVE_STATISTICS, LAYER_VALUE, SURFACE_VALUE
from learnclosure.diagnosis.active import (
    CARRIES,
    CoefficientEstimator,
    carried_potential_vorticity,
    vary,
)
from learnclosure.diagnosis.artefact import StatisticsBuilder
from learnclosure.diagnosis.diffusivities import (
    FluxAndGradient,
    SmoothDiffusivity,
    smooth_diffusivity,
)
from learnclosure.diagnosis.energetics import (
    barotropic_conversion,
    check_energy_bound,
    energetics,
    interface_stratification,
    level_stratification,
)
from learnclosure.diagnosis.estimate import Estimator
from learnclosure.diagnosis.moments import EnsembleSource, GroupMoments, Moments
from learnclosure.diagnosis.surfaces import Surfaces, find_surfaces, full_gradient
from learnclosure.errors import DiagnosisError
from learnclosure.quantities import INTERFACE_FIELD, LAYER_FIELD

FloatArray = npt.NDArray[np.float64]

DECLARED = ("potential_vorticity", "thickness")
"""Active fields that are there only because files or study say so."""


def add_active(
    builder: StatisticsBuilder,
    source: EnsembleSource,
    moments: Moments,
    estimator: Estimator,
    tensor: FloatArray,
) -> dict[str, Any]:
    """Diagnose the active side and add it to the statistics.

    Parameters
    ----------
    builder : StatisticsBuilder
        Already holds ``reduced_gravity`` and ``layer_thickness``.
    source : EnsembleSource
    moments : Moments
    estimator : Estimator
        Of the passive tracers.
    tensor : ndarray, shape (layer, y, x, 2, 2), m2 s-1
        Transport tensor of the passive tracers; not finite where it is not determined.

    Returns
    -------
    dict
        Global attributes: verdicts on potential vorticity and the check of the energy bound.

    Raises
    ------
    DiagnosisError
        If a declared field is the same in all members.
    """
    _check_variance(source, moments.whole)
    if not source.active:
        return {}
    attributes = _add_bound(source, moments.whole)
    surfaces = find_surfaces(source, estimator.geometry, estimator.area)
    if surfaces is not None and vary(moments.whole, surfaces.scalar):
        _add_coefficients(builder, surfaces, estimator, moments)
        _add_energetics(builder, surfaces, estimator, moments.whole)
        if moments.halves:
            groups = [
                FluxAndGradient(surfaces.flux(group.flux), surfaces.gradient(group.mean))
                for group in (moments.whole, *moments.halves)
            ]
            found = smooth_diffusivity(surfaces.geometry, surfaces.area, groups[0], groups[1:])
            _add_diffusivity(builder, "interface_diffusivity", found, surfaces.kind)
    wet = estimator.geometry.mask
    conversion = barotropic_conversion(moments.whole, estimator.geometry)
    _add(builder, "barotropic_conversion", np.where(wet, conversion, np.nan))
    if "potential_vorticity" in source.active:
        attributes |= _add_potential_vorticity(builder, source, moments, estimator, tensor)
    return attributes


def _check_variance(source: EnsembleSource, whole: GroupMoments) -> None:
    for name in DECLARED:
        if name in source.active and not vary(whole, name):
            raise DiagnosisError(
                f"'{name}' is the same in all members",
                where=f"region '{source.name}'",
                found="no variance",
                expected=f"the {name.replace('_', ' ')} of each member at each time",
                remedy=f"correct or remove '{name}' under [ensemble.variables]",
            )


def _add(
    builder: StatisticsBuilder, name: str, values: npt.NDArray[Any], kind: str = "interface"
) -> None:
    """Add a row of the table; on levels what stands on interfaces stands on the levels."""
    row = ACTIVE_STATISTICS[name]
    dims = row.dims
    if kind == "layer":
        dims = {SURFACE_VALUE: LAYER_VALUE, INTERFACE_FIELD: LAYER_FIELD}.get(dims, dims)
    attributes = row.attributes()
    if kind == "layer":
        attributes["long_name"] = attributes["long_name"].replace("interface height", "buoyancy")
    if row.source:
        attributes["references"] = row.source
    long_name, units = attributes.pop("long_name"), attributes.pop("units")
    builder.add(name, values, dims, long_name, units, **attributes)


def _add_bound(source: EnsembleSource, whole: GroupMoments) -> dict[str, Any]:
    check = check_energy_bound(whole, source.active)
    return {
        "energy_bound_violations": np.int32(check.violations),
        "energy_bound_largest_ratio": "; ".join(
            f"{name} {ratio:.4f}" for name, ratio in check.largest_ratio.items()
        ),
    }


def _add_coefficients(
    builder: StatisticsBuilder, surfaces: Surfaces, estimator: Estimator, moments: Moments
) -> None:
    found = CoefficientEstimator(surfaces, estimator).estimate(moments)
    columns = {
        "gm_coefficient": found.gm,
        "gm_coefficient_standard_error": found.gm_error,
        "gm_coefficient_mean": found.gm_layer,
        "gm_coefficient_mean_standard_error": found.gm_layer_error,
        "redi_coefficient": found.redi,
        "redi_coefficient_standard_error": found.redi_error,
        "redi_coefficient_mean": found.redi_layer,
        "redi_coefficient_mean_standard_error": found.redi_layer_error,
        "redi_gm_ratio": found.ratio,
        "redi_gm_ratio_mean": found.ratio_layer,
        "redi_gm_ratio_mean_standard_error": found.ratio_layer_error,
    }
    for name, values in columns.items():
        _add(builder, name, values, surfaces.kind)


def _add_energetics(
    builder: StatisticsBuilder, surfaces: Surfaces, estimator: Estimator, whole: GroupMoments
) -> None:
    thickness = builder.variables["layer_thickness"].values
    if surfaces.kind == "interface":
        gravity = builder.variables["reduced_gravity"].values
        stratification = interface_stratification(gravity, thickness)
    else:
        stratification = level_stratification(whole.mean["buoyancy"], thickness, estimator.geometry)
    found = energetics(whole, estimator.geometry, surfaces, stratification)
    _add(builder, "eddy_available_potential_energy", found.potential_energy, surfaces.kind)
    _add(builder, "baroclinic_conversion", found.baroclinic_conversion, surfaces.kind)
    _add(builder, "eddy_efficiency", found.efficiency, surfaces.kind)


def _add_diffusivity(
    builder: StatisticsBuilder, stem: str, found: SmoothDiffusivity, kind: str
) -> None:
    columns = {
        "": found.diffusivity,
        "_smoothing_length": found.length,
        "_skill": found.skill,
        "_cross_half_skill": found.cross_half_skill,
        "_constant": found.constant,
        "_constant_skill": found.constant_skill,
        "_constant_cross_half_skill": found.constant_cross_half_skill,
        "_raw_flux_skill": found.raw_flux_skill,
        "_raw_flux_cross_half_skill": found.raw_flux_cross_half_skill,
    }
    for ending, values in columns.items():
        _add(builder, stem + ending, values, kind)


def _add_potential_vorticity(
    builder: StatisticsBuilder,
    source: EnsembleSource,
    moments: Moments,
    estimator: Estimator,
    tensor: FloatArray,
) -> dict[str, Any]:
    name, geometry = "potential_vorticity", estimator.geometry
    units = source.units.get(name, "s-1")
    left_out = source.left_out_gradients.get(name, np.zeros((2, len(geometry.mask))))
    groups = [
        FluxAndGradient(group.flux[name], full_gradient(group.mean[name], geometry, left_out))
        for group in (moments.whole, *moments.halves)
    ]
    builder.add_tracer(name, units, groups[0].flux, groups[0].gradient)
    if moments.halves:
        builder.add_tracer(
            name,
            units,
            np.stack([group.flux for group in groups[1:]]),
            np.stack([group.gradient for group in groups[1:]]),
            halves=True,
        )
        found = smooth_diffusivity(geometry, estimator.area, groups[0], groups[1:])
        _add_diffusivity(builder, "potential_vorticity_diffusivity", found, "layer")
    carried = carried_potential_vorticity(moments, estimator, tensor, left_out)
    flux_units = builder.variables[f"{name}_eddy_flux_x"].attrs["units"]
    for number, axis in enumerate("xy"):
        builder.add(
            f"{name}_reconstructed_flux_{axis}", carried.reconstructed[number], LAYER_FIELD,
            f"eddy flux of potential vorticity along {axis} that the transport tensor of "
            "passive tracers carries", flux_units,
        )  # fmt: skip
    _add(builder, "potential_vorticity_flux_skill", carried.flux_skill)
    _add(builder, "potential_vorticity_divergence_skill", carried.divergence_skill)
    _add(builder, "potential_vorticity_flux_reliability", carried.flux_reliability)
    _add(builder, "potential_vorticity_divergence_reliability", carried.divergence_reliability)
    return {
        "potential_vorticity_flux_verdict": "; ".join(carried.flux_verdicts),
        "potential_vorticity_divergence_verdict": "; ".join(carried.divergence_verdicts),
        "potential_vorticity_verdict_threshold": CARRIES,
    }
