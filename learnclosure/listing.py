"""Tables the command line prints."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from rich.table import Table

from learnclosure.quantities import FEATURES, INPUTS

if TYPE_CHECKING:
    from rich.console import RenderableType

    from learnclosure.ensemble.readiness import Readiness


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


def readiness_listing(readiness: Readiness) -> list[RenderableType]:
    """Tabulate what was understood of one ensemble.

    Parameters
    ----------
    readiness : Readiness

    Returns
    -------
    list of renderables
    """
    parts: list[RenderableType] = []
    facts = _table(f"ensemble '{readiness.name}'", "topic", "understood")
    facts.add_row("files", f"{len(readiness.files)}")
    for topic, text in readiness.facts.items():
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
