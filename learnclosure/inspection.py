"""Inspection of a study: what was understood of its ensembles, and a plan for each."""

from __future__ import annotations

import math
from collections.abc import Iterator
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

from learnclosure.diagnosis.planning import DEFAULT_TARGET_ERROR, Plan, plan_diagnosis
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.ensemble.readiness import Readiness, inspect_ensemble
from learnclosure.errors import InputError
from learnclosure.study import Study


@dataclass(frozen=True)
class Inspection:
    """What inspection says of one ensemble.

    Attributes
    ----------
    readiness : Readiness
    plan : Plan or None
        None where a problem keeps the ensemble from being read.
    """

    readiness: Readiness
    plan: Plan | None

    def as_dict(self) -> dict[str, Any]:
        """Return everything as plain values that JSON can hold.

        Returns
        -------
        dict
            What is not known, or not finite, is None.
        """
        found = {**asdict(self.readiness), "ready": self.readiness.ready}
        found["plan"] = None if self.plan is None else asdict(self.plan)
        plain = _plain(found)
        assert isinstance(plain, dict)
        return plain


def _plain(value: Any) -> Any:
    if isinstance(value, dict):
        return {str(key): _plain(part) for key, part in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(part) for part in value]
    if isinstance(value, Path):
        return str(value)
    if isinstance(value, float) and not math.isfinite(value):
        return None
    return value


def inspect_study(
    study: Study, *, target_error: float = DEFAULT_TARGET_ERROR
) -> Iterator[Inspection]:
    """Inspect the ensembles of a study one after another.

    Parameters
    ----------
    study : Study
    target_error : float, optional
        Relative error of the tensor's trace that members are counted for.

    Yields
    ------
    Inspection
        Problems are listed in it, not raised.
    """
    for table in study.ensembles:
        readiness = inspect_ensemble(table, study.folder)
        plan = None
        if readiness.ready:
            try:
                with open_ensemble(table, study.folder) as ensemble:
                    plan, problems = plan_diagnosis(
                        ensemble, study.diagnosis, target_error=target_error
                    )
                readiness.problems += problems
            except InputError as error:
                # A time after the first one, which readiness has read, may be damaged.
                readiness.problems.append(str(error))
        yield Inspection(readiness, plan)
