"""What was found, in a few sentences that follow from the numbers."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from learnclosure.report.tables import layers


def _rivals(evaluation: Mapping[str, Any], family: str) -> dict[str, Any]:
    """Baselines a family must beat: those a host of that family can run."""
    allowed = {"mean-field"} if family == "mean-field" else {"mean-field", family}
    return {
        name: record
        for name, record in evaluation["baselines"].items()
        if record["family"] in allowed
    }


def _above(own: Sequence[Any], theirs: Sequence[Any]) -> list[bool]:
    return [a is not None and b is not None and a > b for a, b in zip(own, theirs, strict=True)]


def _family_sentence(evaluation: Mapping[str, Any], family: str, region: str) -> str:
    record = evaluation["families"][family]
    own = record["regions"][region]["scores"]["flux_r2"]
    rivals = {
        name: rival["regions"][region]["scores"]["flux_r2"]
        for name, rival in _rivals(evaluation, family).items()
        if region in rival["regions"]
    }
    beaten = {name: _above(own, theirs) for name, theirs in rivals.items()}
    unbeaten = [name for name, verdict in beaten.items() if not all(verdict)]
    start = (
        f"{family} ({record['chosen']['regressor']}, {record['chosen']['target']}) explains "
        f"{layers(own)} of the flux variance in {region}"
    )
    if not rivals:
        return f"{start}; no baseline was scored there."
    if unbeaten:
        return f"{start}; in at least one layer it does not beat {', '.join(unbeaten)}."
    best = max(rivals, key=lambda name: sum(value or 0.0 for value in rivals[name]))
    return (
        f"{start}, in every layer more than each baseline (best: {best}, {layers(rivals[best])})."
    )


def findings(evaluation: Mapping[str, Any]) -> list[str]:
    """Say what was found.

    Parameters
    ----------
    evaluation : mapping
        Contents of ``evaluation.json``.

    Returns
    -------
    list of str
        Sentences; honest where a closure does not do what it should.
    """
    families = evaluation["families"]
    splits = {
        region: found["split"]
        for record in families.values()
        for region, found in record["regions"].items()
    }
    held_out = [region for region, split in splits.items() if split == "test"]
    trained = [region for region, split in splits.items() if split != "test"]
    sentences = []
    if held_out:
        sentences.append(
            f"Trained on {', '.join(trained)}; {', '.join(held_out)} "
            f"{'was' if len(held_out) == 1 else 'were'} held out and scored once."
        )
    else:
        sentences.append(
            "No region was held out: nothing here shows how a closure does in a region it has "
            "not seen."
        )
    for family in families:
        for region in held_out or list(families[family]["regions"]):
            sentences.append(_family_sentence(evaluation, family, region))
    for region in held_out:
        ceiling = evaluation["ceiling"].get(region)
        if ceiling:
            sentences.append(
                f"The tensor of an independent half of the members reaches "
                f"{layers(ceiling['flux_r2'])} on the same fluxes of {region}."
            )
    failed = [
        f"{family}: {check['check']}"
        for family, checks in evaluation["audit"].items()
        for check in checks
        if not check["passed"]
    ]
    sentences.append(
        f"The audit failed: {', '.join(failed)}. Do not ship these closures."
        if failed
        else "All checks of the audit passed."
    )
    return sentences
