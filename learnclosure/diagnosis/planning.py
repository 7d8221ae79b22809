"""A plan of a diagnosis before it runs: costs, prospects and what stands in the way."""

from __future__ import annotations

import time
from dataclasses import dataclass, replace

from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.costs import Costs, artefact_sizes, predict_costs
from learnclosure.diagnosis.degeneracy import find_degenerate_fields
from learnclosure.diagnosis.estimate import Estimator
from learnclosure.diagnosis.moments import EnsembleSource, accumulate_moments
from learnclosure.diagnosis.probe import Probe
from learnclosure.diagnosis.prospects import (
    Conditioning,
    ErrorProspect,
    SamplingCost,
    conditioning,
    error_prospect,
    sampling_cost,
)
from learnclosure.errors import DiagnosisError
from learnclosure.study import DiagnosisSettings

DEFAULT_TARGET_ERROR = 0.2


@dataclass(frozen=True)
class Plan:
    """What a short look at the data says of a diagnosis.

    Attributes
    ----------
    times_read, cells_seen : int
        Times and coarse cells it was taken from.
    costs : Costs
    conditioning : Conditioning
    sampling : SamplingCost
    error : ErrorProspect
    """

    times_read: int
    cells_seen: int
    costs: Costs
    conditioning: Conditioning
    sampling: SamplingCost
    error: ErrorProspect


def plan_diagnosis(
    ensemble: EnsembleSource,
    settings: DiagnosisSettings | None = None,
    *,
    target_error: float = DEFAULT_TARGET_ERROR,
) -> tuple[Plan | None, list[str]]:
    """Plan the diagnosis of one ensemble from a short look at its first times.

    Parameters
    ----------
    ensemble : EnsembleSource
    settings : DiagnosisSettings, optional
    target_error : float, optional
        Relative error of the tensor's trace that is aimed at.

    Returns
    -------
    plan : Plan or None
        None if the first times cannot be diagnosed.
    problems : list of str
        What stands in the way, one sentence each.
    """
    chosen = settings or DiagnosisSettings()
    coarsening = Coarsening(ensemble.grid, chosen.coarsen)
    probe = Probe(ensemble, coarsening)
    start = time.perf_counter()
    try:
        moments = accumulate_moments(probe, probe.coarsening)
    except DiagnosisError as error:
        return None, [str(error)]
    working = time.perf_counter() - start - sum(probe.reading)
    problems = [str(found) for found in find_degenerate_fields(probe.first, probe)]
    geometry = probe.coarsening.geometry
    area = geometry.area * probe.coarsening.wet_share

    def estimator(how: DiagnosisSettings) -> Estimator:
        return Estimator.from_settings(geometry, area, how, ensemble.tracers, moments.whole.mean)

    # The jackknife of a short look need not keep the floor exactly.
    quick = estimator(chosen.model_copy(update={"floor_method": "projection"}))
    costs = predict_costs(ensemble, coarsening, chosen, probe, moments, estimator(chosen), working)
    try:
        costs = replace(costs, artefacts=artefact_sizes(probe.sample, coarsening, chosen))
    except DiagnosisError as error:
        problems = problems or [str(error)]
    accumulated = any(name.endswith("_within_x") for name in probe.first)
    plan = Plan(
        times_read=len(probe.times),
        cells_seen=int(geometry.mask.sum()),
        costs=costs,
        conditioning=conditioning(quick, moments),
        sampling=sampling_cost(probe, ensemble.times, accumulated),
        error=error_prospect(
            quick, moments, probe,
            members=len(ensemble.member_labels), times=len(ensemble.times), target=target_error,
        ),
    )  # fmt: skip
    return plan, problems
