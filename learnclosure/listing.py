"""Tables the command line prints."""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from rich.table import Table

from learnclosure.diagnosis.tensor import LARGEST_CONDITION_NUMBER
from learnclosure.quantities import FEATURES, INPUTS

if TYPE_CHECKING:
    from rich.console import RenderableType

    from learnclosure.diagnosis.planning import Plan
    from learnclosure.ensemble.readiness import Readiness
    from learnclosure.export.checks import VerifyReport
    from learnclosure.export.compare import Comparison

SNAPSHOTS_MISS = (
    "snapshots miss the flux between them, accumulated total fluxes do not: snapshots every 5 "
    "days alone cost a coarse steady error of 0.16 to 0.43 of the tracer's standard deviation, "
    "every 2 days 0.02 to 0.09 (measured on the built-in channel)"
)


def _table(title: str, *headings: str) -> Table:
    table = Table(title=title, title_justify="left")
    for heading in headings:
        table.add_column(heading, overflow="fold")
    return table


def feature_listing() -> Table:
    """List every input and feature with units, symmetry, locality and source.

    Returns
    -------
    rich.table.Table
    """
    table = _table(
        f"what a closure may use: {len(INPUTS)} inputs a host gives, {len(FEATURES)} features "
        "made of them", "name", "group", "units, parity, needs", "meaning, validity, source",
    )  # fmt: skip
    table.columns[0].no_wrap = True
    table.show_lines = True
    for quantity in (*INPUTS.values(), *FEATURES.values()):
        groups: tuple[str, ...] = ("standard",) * quantity.standard
        groups += (quantity.topic,) * bool(quantity.topic)
        if not groups:
            groups = (quantity.group, "eddy energy") if quantity.energy else (quantity.group,)
        meaning = (quantity.long_name, quantity.validity, quantity.source)
        table.add_row(
            quantity.name,
            ", ".join(groups),
            f"{quantity.units}, {quantity.parity}, {quantity.locality}",
            "\n".join(part for part in meaning if part),
        )
    return table


def _cells(values: list[float | None] | None) -> str:
    if values is None:
        return "-"
    return " / ".join("-" if value is None else f"{value:.2f}" for value in values)


def _number(value: float | None) -> str:
    return "-" if value is None else f"{value:.3g}"


def evaluation_listing(evaluation: Mapping[str, Any]) -> list[Table]:
    """Tabulate flux scores by region and the audit.

    Parameters
    ----------
    evaluation : mapping
        Contents of ``evaluation.json``.

    Returns
    -------
    list of rich.table.Table
    """
    regions = list(evaluation["ceiling"])
    scores = _table(
        "flux R2 by layer, from the top; training regions out of fold", "closure", *regions
    )
    rows: list[tuple[str, Mapping[str, Any]]] = [
        *evaluation["families"].items(),
        *evaluation["baselines"].items(),
    ]
    for name, record in rows:
        found = record["regions"]
        scores.add_row(
            name,
            *(_cells(found[region]["scores"]["flux_r2"] if region in found else None)
              for region in regions),
        )  # fmt: skip
    halves = evaluation["ceiling"]
    scores.add_row(
        "tensor of an independent half",
        *(_cells(halves[region]["flux_r2"] if halves[region] else None) for region in regions),
    )
    audit = _table("audit", "family", "check", "result", "value", "limit")
    for family, checks in evaluation["audit"].items():
        for check in checks:
            audit.add_row(
                family, check["check"], "passed" if check["passed"] else "FAILED",
                _number(check["value"]), _number(check["limit"]),
            )  # fmt: skip
    return [scores, audit]


def _bytes(value: float) -> str:
    for unit, size in (("GB", 1e9), ("MB", 1e6)):
        if value >= size:
            return f"{value / size:.3g} {unit}"
    return f"{value / 1e3:.3g} kB"


def _duration(seconds: float) -> str:
    for unit, size in (("hours", 3600.0), ("minutes", 60.0)):
        if seconds >= 2.0 * size:
            return f"{seconds / size:.2g} {unit}"
    return f"{max(seconds, 1.0):.2g} s"


def _sampling(plan: Plan) -> list[str]:
    cost = plan.sampling
    if math.isnan(cost.spacing):
        return ["one time: nothing is known of how eddies change"]
    texts = [f"{cost.times} snapshots, {cost.spacing:.3g} days apart"]
    if math.isnan(cost.eddy_time):
        texts.append("from one to the next hardly any eddy is left")
    else:
        texts.append(f"eddies fall to 1/e of themselves in {cost.eddy_time:.2g} days")
    if not math.isnan(cost.flux_time):
        texts.append(f"what makes their flux in {cost.flux_time:.2g} days")
    if not math.isnan(cost.effective):
        texts.append(f"so they are worth {cost.effective:.2g} independent ones")
    if cost.accumulated:
        return [", ".join(texts), "accumulated total fluxes are read: nothing between is missed"]
    return [", ".join(texts), SNAPSHOTS_MISS]


def plan_facts(plan: Plan) -> list[tuple[str, str]]:
    """Put a plan in words, by topic.

    Parameters
    ----------
    plan : Plan

    Returns
    -------
    list of (str, str)
    """
    costs, tracers, error = plan.costs, plan.conditioning, plan.error
    sizes = ", ".join(f"{name} {_bytes(size)}" for name, size in costs.artefacts.items())
    if math.isnan(error.members_needed):
        members = "the few times looked at do not tell how large the error will be"
    else:
        members = (
            f"about {math.ceil(error.members_needed)} for a relative error of {error.target:g} of "
            f"the tensor's trace; those at hand give about {error.error:.2g}"
        )
    return [
        (
            "reading",
            f"{costs.passes} pass over the fields and {costs.checksum_passes} for checksums, "
            f"{_bytes(costs.bytes_read)}",
        ),
        ("memory", f"about {_bytes(costs.memory)} for one region"),
        ("artefacts", sizes or "not known: no tensor is determined where it was tried"),
        ("time to diagnose", f"about {_duration(costs.seconds)} in one process on this machine"),
        (
            "tracer gradients",
            f"condition number {tracers.median:.3g} (median), {tracers.ninth_decile:.3g} (90 %), "
            f"{tracers.undetermined:.1%} of cells above {LARGEST_CONDITION_NUMBER:g}; most nearly "
            f"parallel are {' and '.join(tracers.closest_pair)}, {tracers.angle:.2g} degrees apart",
        ),
        *(("sampling", text) for text in _sampling(plan)),
        ("members needed", members),
        ("seen for this", f"{plan.times_read} times, {plan.cells_seen} coarse cells"),
    ]


def readiness_listing(readiness: Readiness, plan: Plan | None = None) -> list[RenderableType]:
    """Tabulate what was understood of one ensemble, and the plan of its diagnosis.

    Parameters
    ----------
    readiness : Readiness
    plan : Plan, optional

    Returns
    -------
    list of renderables
    """
    parts: list[RenderableType] = []
    facts = _table(f"ensemble '{readiness.name}'", "topic", "understood")
    facts.add_row("files", f"{len(readiness.files)}")
    for topic, text in readiness.facts.items():
        facts.add_row(topic, text)
    for topic, text in plan_facts(plan) if plan is not None else ():
        facts.add_row(topic, text)
    for note in readiness.assumptions:
        facts.add_row("assumed", note)
    for note in readiness.missing:
        facts.add_row("missing", note)
    for note in readiness.problems:
        facts.add_row("problem", note)
    parts.append(facts)
    if readiness.roles:
        roles = _table("", "part", "variable", "units in the files", "units read", "sits at")
        for line in readiness.roles:
            roles.add_row(line.part, line.variable, line.units_before, line.units_after, line.place)
        parts.append(roles)
    elif readiness.variables:
        found = _table("", "variables of the first file")
        for text in readiness.variables:
            found.add_row(text)
        parts.append(found)
    return parts


def rule_listing() -> Table:
    """List every rule a bundle is held to.

    Returns
    -------
    rich.table.Table
    """
    from learnclosure.export.rules import RULES

    table = _table("rules of the gate", "rule", "check", "what must hold")
    for name, rule in RULES.items():
        table.add_row(name, rule.check, rule.meaning)
    return table


def verification_listing(outcome: VerifyReport) -> Table:
    """Tabulate the checks of a bundle.

    Parameters
    ----------
    outcome : VerifyReport

    Returns
    -------
    rich.table.Table
    """
    table = _table(str(outcome.folder), "check", "result", "found", "rule")
    for check in outcome.checks:
        table.add_row(check.name, "passed" if check.passed else "FAILED", check.found, check.rule)
    return table


def comparison_listing(comparison: Comparison) -> list[Table]:
    """Tabulate what sets two bundles apart.

    Parameters
    ----------
    comparison : Comparison

    Returns
    -------
    list of rich.table.Table
    """

    def cell(value: str | float | None) -> str:
        return _number(value) if value is None or isinstance(value, float) else value

    rows = _table("differences beyond rounding", "topic", "what", "first", "second")
    for row in comparison.differences:
        if row.topic != "output":
            rows.add_row(row.topic, row.name, cell(row.first), cell(row.second))
    outputs = _table(
        "outputs on the reference inputs of the first", "output", "largest difference over spread"
    )
    for name, value in comparison.outputs.items():
        outputs.add_row(name, f"{value:.1e}")
    if not comparison.outputs:
        outputs.add_row("all", "the second needs inputs the first has not")
    speed = _table("processor time", "first", "second", "second over first")
    speed.add_row(
        *(f"{1e6 * value:.2f} us a point" for value in comparison.seconds),
        f"{comparison.speed_ratio:.2f}",
    )
    return [rows, outputs, speed]
