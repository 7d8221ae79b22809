"""Ensemble means, eddy fluxes and what their sampling error needs, in one pass over time."""

from __future__ import annotations

from collections.abc import Callable

from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.eddies import TIME_BLOCKS, Accumulation
from learnclosure.diagnosis.execution import Execution, merged_chunks
from learnclosure.diagnosis.moment_sums import MomentState
from learnclosure.diagnosis.moment_types import (
    Definition,
    GroupMoments,
    Moments,
    PartialSource,
)
from learnclosure.ensemble.protocol import EnsembleSource
from learnclosure.errors import DiagnosisError

__all__ = [
    "TIME_BLOCKS",
    "Definition",
    "EnsembleSource",
    "GroupMoments",
    "MomentState",
    "Moments",
    "PartialSource",
    "accumulate_moments",
]


def accumulate_moments(
    source: EnsembleSource,
    coarsening: Coarsening,
    definition: Definition = "ensemble",
    *,
    progress: Callable[[float], None] | None = None,
    execution: Execution | None = None,
) -> Moments:
    """Accumulate means and eddy fluxes over all times of an ensemble.

    Departures are taken at full resolution and their products are averaged over blocks, by
    area or, where ``source.weighted``, by thickness and area:

    * ``ensemble``: departures from the ensemble mean of the same time, unbiased by N/(N - 1)
      and averaged over time;
    * ``ensemble-subgrid``: the same of block means, plus each member's covariance within
      blocks: total flux on the coarse grid minus the flux of coarse ensemble means;
    * ``time``: departures of each member from its own time mean, unbiased by T/(T - 1), which
      supposes times far enough apart to be independent, and averaged over members.

    Thickness-weighted averages are ``c_hat = <hc>/<h>``, ``J = <h u''c''>/<h>`` with
    departures from ``c_hat``, and the bolus velocity ``<h'u'>/<h>`` (de Szoeke and Bennett
    1993, J. Phys. Oceanogr. 23; Young 2012, J. Phys. Oceanogr. 42, 692-707; both from
    memory). The factors above are then exact only where all thicknesses are equal.

    Fields ``<tracer>_within_x`` and ``_within_y`` are averaged over members and added.

    Parameters
    ----------
    source : EnsembleSource
        A source that is also a ``PartialSource`` is read in bands of rows where it is large.
    coarsening : Coarsening
    definition : {"ensemble", "ensemble-subgrid", "time"}, optional
    progress : callable, optional
        Called with the share done.
    execution : Execution, optional
        Processes to share the work and where to keep what is done; by default the work is
        done here. The result does not depend on it, to the last bit.

    Returns
    -------
    Moments

    Raises
    ------
    DiagnosisError
        If there are fewer than two members, or values are missing where none may be.
    """
    count = len(source.member_labels)
    if count < 2:
        raise DiagnosisError(
            "one member has no eddies about an ensemble mean",
            where=f"region '{source.name}'",
            found="one member",
            expected="at least 2 members",
            remedy="add members to 'files'",
        )
    accumulation = Accumulation(source, coarsening, definition)
    state = merged_chunks(accumulation, execution or Execution(), progress)
    return accumulation.finish(state)
