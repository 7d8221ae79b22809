"""The diagnosis of one region: from its ensemble to ``statistics.nc``."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure import __version__
from learnclosure.diagnosis.active_artefact import add_active
from learnclosure.diagnosis.artefact import StatisticsBuilder
from learnclosure.diagnosis.ceiling_artefact import add_ceilings
from learnclosure.diagnosis.ceilings import estimate_ceilings
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.degeneracy import check_information
from learnclosure.diagnosis.depth_axes import add_depth_axes
from learnclosure.diagnosis.eddies import describe
from learnclosure.diagnosis.estimate import Estimator, Form, GroupEstimate, WithheldSkill
from learnclosure.diagnosis.execution import Execution
from learnclosure.diagnosis.gauge import HelmholtzSolver, rotational_share
from learnclosure.diagnosis.inversion import SmoothInversion
from learnclosure.diagnosis.moments import EnsembleSource, Moments, accumulate_moments
from learnclosure.diagnosis.quality import (
    add_budget,
    add_quality,
    add_relaxation,
    add_skill,
    cautions,
    tensor_components,
)
from learnclosure.diagnosis.sampling import jackknife_standard_error
from learnclosure.diagnosis.tensor import (
    condition_number,
    scalar_diffusivity,
    symmetric_parts,
)
from learnclosure.ensemble.averaging import averaged
from learnclosure.errors import DiagnosisError
from learnclosure.study import DiagnosisSettings

FloatArray = npt.NDArray[np.float64]


def diagnose(
    ensemble: EnsembleSource,
    settings: DiagnosisSettings | None = None,
    *,
    progress: Callable[[float, str], None] | None = None,
    execution: Execution | None = None,
) -> xr.Dataset:
    """Diagnose eddy statistics and the transport tensor of one region.

    Parameters
    ----------
    ensemble : EnsembleSource
        An open ensemble.
    settings : DiagnosisSettings, optional
    progress : callable, optional
        Called with the share done and a note.
    execution : Execution, optional
        Who sums the moments and where they are kept meanwhile.

    Returns
    -------
    xarray.Dataset
        Contents of ``statistics.nc``: mean state, eddy fluxes, gradients, transport
        tensor with its error, reliability and skill on withheld tracers.

    Raises
    ------
    DiagnosisError
        If members or tracers cannot determine a tensor.
    """
    chosen = settings or DiagnosisSettings()
    _check_tracers(ensemble)
    ensemble = averaged(ensemble, chosen)
    report = progress or (lambda _share, _note: None)
    coarsening = Coarsening(ensemble.grid, chosen.coarsen)
    geometry = coarsening.geometry
    area = geometry.area * coarsening.wet_share
    moments = accumulate_moments(
        ensemble,
        coarsening,
        chosen.eddies,
        progress=lambda share: report(0.7 * share, "moments"),
        execution=execution,
    )
    check_information(moments, ensemble, geometry.mask)
    estimator = Estimator.from_settings(
        geometry, area, chosen, ensemble.tracers, moments.whole.mean
    )
    whole = estimator.group(moments.whole)
    halves = tuple(estimator.group(half) for half in moments.halves)
    valid = estimator.determined(whole.equations)
    _check_determined(ensemble, whole, valid)
    report(0.8, "jackknife")
    left_out = estimator.left_out(moments)
    error = None if left_out is None else jackknife_standard_error(left_out)
    report(0.85, "skill")
    skill = estimator.withheld_skill(whole, ensemble.withheld_tracers, valid)
    other_form: Form = "memory" if chosen.form == "local" else "local"
    other = estimator.group(moments.whole, other_form)
    other_skill = estimator.withheld_skill(other, ensemble.withheld_tracers, valid)

    builder = StatisticsBuilder(coarsening.x, coarsening.y, len(geometry.mask))
    _add_mean_state(builder, ensemble, coarsening, moments)
    _add_tracers(builder, ensemble, whole, halves, moments)
    _add_gauge(builder, estimator.gauge, whole)
    _add_tensor(builder, estimator, whole, valid, error)
    add_quality(builder, ensemble, estimator, whole, halves, valid)
    add_budget(builder, ensemble, estimator, whole, halves, valid, error)
    add_skill(builder, skill, other_form, other_skill)
    if chosen.relaxation_time is not None:
        add_relaxation(builder, whole, moments.whole, chosen.relaxation_time, valid)
    if halves and left_out is not None and chosen.ceiling_draws:
        report(0.9, "ceilings")
        names = (*ensemble.tracers, *ensemble.withheld_tracers)
        add_ceilings(
            builder,
            estimate_ceilings(
                moments, estimator, whole, halves, left_out, valid, names,
                members=len(ensemble.member_labels), draws=chosen.ceiling_draws,
            ),
        )  # fmt: skip
    report(0.97, "active side")
    known = np.where(valid[..., None, None], whole.smooth.tensor, np.nan)
    active = add_active(builder, ensemble, moments, estimator, known)
    add_depth_axes(builder, ensemble, coarsening, moments.whole, whole.gradient, chosen)
    report(1.0, "done")
    attributes = _attributes(ensemble, chosen, estimator.inversion, skill)
    statistics = builder.build({**attributes, **active})
    return statistics.assign_attrs(cautions="; ".join(cautions(statistics)))


def _check_tracers(ensemble: EnsembleSource) -> None:
    if len(ensemble.tracers) < 2:
        raise DiagnosisError(
            "a transport tensor needs two tracers with different gradients",
            where=f"region '{ensemble.name}'",
            found=f"{len(ensemble.tracers)} ({', '.join(ensemble.tracers) or 'none'})",
            expected="at least two tracers that are not withheld",
            remedy="name them under [ensemble.variables] tracers",
        )


def _check_determined(
    ensemble: EnsembleSource, whole: GroupEstimate, valid: npt.NDArray[np.bool_]
) -> None:
    if valid.any():
        return
    typical = float(np.median(condition_number(whole.equations.M)))
    raise DiagnosisError(
        "the mean tracer gradients are parallel or vanish everywhere",
        where=f"region '{ensemble.name}': {', '.join(ensemble.tracers)}",
        found=f"a median condition number of {typical:.3g}",
        expected="tracers whose mean gradients point in different directions",
        remedy="use tracers that differ, along x as well as along y",
    )


def _add_mean_state(
    builder: StatisticsBuilder,
    ensemble: EnsembleSource,
    coarsening: Coarsening,
    moments: Moments,
) -> None:
    grid, geometry = ensemble.grid, coarsening.geometry
    mean = moments.whole.mean
    if grid.reduced_gravity is not None:
        gravity = coarsening.surface_mean(grid.reduced_gravity)
    elif ensemble.has_buoyancy:
        gravity = mean["buoyancy"][:-1] - mean["buoyancy"][1:]
    elif len(geometry.mask) == 1:
        gravity = np.zeros((0, *geometry.mask.shape[1:]))
    else:
        raise DiagnosisError(
            "the stratification is unknown",
            where=f"region '{ensemble.name}'",
            expected="buoyancy, temperature or reduced gravity",
            remedy="name one under [ensemble.variables] or [ensemble.grid]",
        )
    both = geometry.mask[:-1] & geometry.mask[1:]
    fields: dict[str, FloatArray] = {
        "x_velocity": mean["x_velocity"],
        "y_velocity": mean["y_velocity"],
        "layer_thickness": coarsening.mean(grid.layer_thickness),
        "reduced_gravity": np.where(both, gravity, 0.0),
        "coriolis_parameter": coarsening.surface_mean(grid.coriolis_parameter),
        "planetary_beta_x": coarsening.surface_mean(grid.planetary_beta_x),
        "planetary_beta_y": coarsening.surface_mean(grid.planetary_beta_y),
        "sea_floor_depth": coarsening.mean(np.broadcast_to(grid.sea_floor_depth, grid.shape)).max(
            axis=0
        ),
        "cell_width_x": geometry.dx,
        "cell_width_y": geometry.dy,
        "wet_share": coarsening.wet_share,
        "eddy_kinetic_energy": moments.whole.eddy_kinetic_energy,
    }
    for name, values in fields.items():
        builder.add_named(name, np.ascontiguousarray(values))
    share = getattr(ensemble, "valid_share", None)
    if share is not None:
        builder.add_named("valid_share", coarsening.mean(share))
    if moments.halves:
        builder.add_named(
            "eddy_kinetic_energy",
            np.stack([half.eddy_kinetic_energy for half in moments.halves]),
            "_halves",
            "of each half of the members,",
        )


def _add_tracers(
    builder: StatisticsBuilder,
    ensemble: EnsembleSource,
    whole: GroupEstimate,
    halves: tuple[GroupEstimate, ...],
    moments: Moments,
) -> None:
    for name in (*ensemble.tracers, *ensemble.withheld_tracers):
        units = ensemble.units.get(name, "1")
        builder.add(
            f"{name}_mean", moments.whole.mean[name], ("layer", "y", "x"),
            f"ensemble and time mean of {name}", units,
        )  # fmt: skip
        builder.add_tracer(name, units, whole.flux[name], whole.gradient[name])
        if halves:
            builder.add_tracer(
                name,
                units,
                np.stack([half.flux[name] for half in halves]),
                np.stack([half.gradient[name] for half in halves]),
                halves=True,
            )


def _add_gauge(builder: StatisticsBuilder, gauge: HelmholtzSolver, whole: GroupEstimate) -> None:
    fluxes = np.stack(list(whole.flux.values()))
    sea = np.where(gauge.geometry.mask, gauge.geometry.area, 0.0)
    builder.coordinates["tracer"] = xr.Variable(
        ("tracers",), np.array(list(whole.flux), dtype=object), {"long_name": "tracer"}
    )
    builder.add(
        "rotational_share", rotational_share(fluxes, gauge.divergent_part(fluxes), sea),
        ("tracers", "layer"),
        "share of the mean square of the eddy flux that is not in its divergent part", "1",
        references="Fox-Kemper, Ferrari and Pedlosky 2003, J. Phys. Oceanogr. 33, 478-483",
    )  # fmt: skip


def _add_tensor(
    builder: StatisticsBuilder,
    estimator: Estimator,
    whole: GroupEstimate,
    valid: npt.NDArray[np.bool_],
    error: FloatArray | None,
) -> None:
    wet = estimator.geometry.mask

    def known(values: FloatArray, where: npt.NDArray[np.bool_] = valid) -> FloatArray:
        """Keep what the data determine; the fit's fill from neighbours is not written."""
        return np.where(where, values, np.nan)

    for name, values in tensor_components(whole.smooth.tensor).items():
        builder.add_named(f"transport_tensor_{name}", known(values))
    for name, values in tensor_components(whole.least_squares).items():
        builder.add_named(f"least_squares_tensor_{name}", known(values))
    if error is not None:
        for name, values in tensor_components(error).items():
            builder.add_named(
                f"transport_tensor_{name}", known(values), "_standard_error",
                "standard error by leaving one member out, of the",
            )  # fmt: skip
    xx, xy, yy, alpha = symmetric_parts(whole.smooth.tensor)
    for name, values in (("xx", xx), ("xy", xy), ("yy", yy)):
        builder.add_named(f"symmetric_tensor_{name}", known(values))
    builder.add_named("antisymmetric_tensor", known(alpha))
    builder.add_named("scalar_diffusivity", known(scalar_diffusivity(whole.equations), wet))
    condition = condition_number(whole.equations.M)
    builder.add_named(
        "condition_number", known(np.where(np.isfinite(condition), condition, np.nan), wet)
    )
    builder.add_named("valid", valid.astype(np.int8))
    builder.add(
        "floor_active", whole.smooth.floored.astype(np.int8), ("layer", "y", "x"),
        "1 where the floor holds up an eigenvalue of the symmetric part", "1",
    )  # fmt: skip


def _attributes(
    ensemble: EnsembleSource,
    settings: DiagnosisSettings,
    inversion: SmoothInversion,
    skill: WithheldSkill | None,
) -> dict[str, Any]:
    geometry = inversion.geometry
    axes = [axis for axis in "xy" if getattr(geometry, f"periodic_{axis}")]
    cell = "layer" if ensemble.grid.vertical == "layers" else "level"
    attributes: dict[str, Any] = {
        "Conventions": "CF-1.11",
        "title": f"eddy statistics and transport tensor of the region {ensemble.name}",
        "source": f"learnclosure {__version__}",
        "references": "Plumb and Mahlman 1987, J. Atmos. Sci. 44, 298-327",
        "region": ensemble.name,
        "split": ensemble.split,
        "eddy_definition": describe(
            settings.eddies, bool(getattr(ensemble, "weighted", False)), cell
        ),
        "members": np.int32(len(ensemble.member_labels)),
        "snapshots": np.int32(len(ensemble.times)),
        "vertical": ensemble.grid.vertical,
        "periodic": " ".join(axes),
        "tracers": " ".join(ensemble.tracers),
        "withheld_tracers": " ".join(ensemble.withheld_tracers),
        "tensor_convention": (
            f"J = -K {'grad C' if settings.form == 'local' else 'g, g the remembered grad C'}, "
            "rows flux, columns gradient; alpha = (Kyx - Kxy)/2"
        ),
        "coarsening_factor": np.int32(settings.coarsen),
        "tensor_form": settings.form,
        "memory_time_s": settings.memory_time,
        "memory_length_m": settings.blurring_length,
        "inverted_flux": settings.flux,
        "rotational_weight": settings.kept_rotational_weight,
        "gauge_boundary": settings.gauge_boundary,
        "smoothing_length_m": settings.smoothing_length,
        "floor_m2_s_1": settings.floor,
        "floor_method": settings.floor_method,
        "scalar_pull": inversion.pull,
        "assumptions": "; ".join(ensemble.assumptions),
        **getattr(ensemble, "attributes", {}),
    }
    if skill is not None:
        attributes["withheld_method"] = (
            "tracers declared as withheld"
            if ensemble.withheld_tracers
            else "no tracer is withheld; each in turn was left out of a fit of its own"
        )
    digest = getattr(ensemble, "input_sha256", None)
    if digest is not None:
        attributes["input_sha256"] = digest
    return attributes
