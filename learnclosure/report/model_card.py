"""The model card of a bundle: what it is, what it is evidence for, and what it is not for."""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from learnclosure.report.cautions import CAUTIONS, NOT_FOR

REGIME = (
    "coriolis_parameter",
    "deformation_radius",
    "eady_growth_rate",
    "charney_green_number",
    "jet_speed",
    "jet_width",
    "eddy_kinetic_energy",
)
"""Inputs that tell what a region is like."""


def _number(value: Any) -> str:
    return "-" if value is None else f"{value:.2f}" if isinstance(value, float) else str(value)


def _layers(values: Sequence[Any] | None) -> str:
    return "-" if values is None else " / ".join(_number(value) for value in values)


def _table(headings: Sequence[str], rows: Iterable[Sequence[Any]]) -> str:
    lines = ["| " + " | ".join(headings) + " |", "|" + "---|" * len(headings)]
    lines += ["| " + " | ".join(str(cell) for cell in row) + " |" for row in rows]
    return "\n".join(lines)


def _training(manifest: Mapping[str, Any]) -> str:
    training = manifest.get("training", {})
    rows = [
        (
            region.get("name", "-"),
            region.get("members", "-"),
            region.get("snapshots", "-"),
            region.get("layers", "-"),
            f"{region['cell_width'] / 1e3:.3g}" if "cell_width" in region else "-",
            region.get("eddy_definition", "-"),
            f"`{str(region.get('input_sha256', ''))[:16]}`",
        )
        for region in training.get("regions", [])
    ]
    text = _table(
        (
            "region",
            "members",
            "snapshots",
            "layers",
            "cell, km",
            "eddies",
            "data SHA-256, first 16",
        ),
        rows,
    )
    versions = ", ".join(f"{name} {value}" for name, value in training.get("versions", {}).items())
    return f"{text}\n\nSeed {training.get('seed', '-')}. Made with {versions}."


def _regime(manifest: Mapping[str, Any]) -> str:
    """Say in plain numbers what the regions were like."""
    rows = {row.get("name"): row for row in manifest.get("inputs", [])}
    lines = []
    for name in REGIME:
        low, high = rows.get(name, {}).get("range_in_regions", (None, None))
        if low is not None and high is not None:
            row = rows[name]
            unit = "" if row.get("units") == "1" else f" {row.get('units', '')}"
            lines.append(f"* {row.get('long_name', name)}: {low:.3g} to {high:.3g}{unit}")
    return "\n".join(lines) or "No ranges were recorded."


def _single(manifest: Mapping[str, Any]) -> str:
    record = manifest.get("single_precision")
    if not record:
        return "There is no variant in single precision."
    return (
        f"`{record.get('file', '-')}` takes the products of its regressor in single precision, "
        f"within {record.get('tolerance', float('nan')):.1e} of the spread of each output."
    )


def _scores(manifest: Mapping[str, Any]) -> str:
    evaluation = manifest.get("evaluation", {})
    ceiling = evaluation.get("ceiling") or {}
    closure = evaluation.get("closure", {})
    baselines = evaluation.get("baselines", {})
    rows = []
    for region, found in closure.get("regions", {}).items():
        role = "held out" if found.get("split") == "test" else "out of fold"
        scores = found.get("scores", {})
        half = (ceiling.get(region) or {}).get("flux_r2")
        rows.append((region, role, "this closure", _layers(scores.get("flux_r2")),
                     _layers(scores.get("divergence_r2"))))  # fmt: skip
        for name, baseline in baselines.items():
            theirs = baseline.get("regions", {}).get(region, {}).get("scores", {})
            rows.append((region, role, name, _layers(theirs.get("flux_r2")),
                         _layers(theirs.get("divergence_r2"))))  # fmt: skip
        rows.append((region, "", "tensor of an independent half of the members", _layers(half),
                     _layers((ceiling.get(region) or {}).get("divergence_r2"))))  # fmt: skip
    headings = ("region", "role", "what predicts", "flux R2 by layer", "divergence R2 by layer")
    return _table(headings, rows)


def _folds(manifest: Mapping[str, Any]) -> str:
    folds = manifest.get("evaluation", {}).get("closure", {}).get("folds", {})
    rows = [
        (kind, _layers(found.get("flux_r2")), _layers(found.get("divergence_r2")))
        for kind, found in folds.items()
    ]
    return _table(("folds", "flux R2 by layer", "divergence R2 by layer"), rows)


def _audit(manifest: Mapping[str, Any]) -> str:
    rows = [
        (
            check.get("check", "-"),
            "passed" if check.get("passed") else "FAILED",
            f"{check['value']:.3g}" if check.get("value") is not None else "-",
            f"{check['limit']:.3g}" if check.get("limit") is not None else "-",
            check.get("meaning", ""),
        )
        for check in manifest.get("evaluation", {}).get("audit", [])
    ]
    return _table(("check", "result", "value", "limit", "meaning"), rows)


def _inputs(manifest: Mapping[str, Any]) -> str:
    rows = []
    for row in manifest.get("inputs", []):
        low, high = row.get("range_in_regions", (None, None))
        span = "-" if low is None else f"{low:.3g} to {high:.3g}"
        rows.append((f"`{row['name']}`", row.get("units", "-"), row.get("locality", "-"),
                     row.get("parity", "-"), span, row.get("long_name", "")))  # fmt: skip
    return _table(("input", "units", "locality", "parity", "range met", "meaning"), rows)


def _half_widths(manifest: Mapping[str, Any]) -> str:
    record = manifest.get("half_width")
    if record is None:
        return "No half-widths were calibrated; the outputs hold a very large number."
    meaning = record.get("guarantee") or record.get("meaning") or ""
    return str(meaning)


def render_model_card(manifest: Mapping[str, Any]) -> str:
    """Write the model card of a bundle.

    Parameters
    ----------
    manifest : mapping
        Contents of ``manifest.json``; what is missing in it is left out.

    Returns
    -------
    str
        Markdown.
    """
    name, version = manifest.get("name", "closure"), manifest.get("version", "-")
    family = manifest.get("family", "-")
    needs = (
        "mean fields and a field of eddy kinetic energy"
        if family == "local-energy"
        else "mean fields only"
    )
    bounds = manifest.get("bounds", {})
    fallback = manifest.get("fallback", {})
    parts = [
        f"# {name} {version}",
        "A mesoscale eddy closure: from resolved mean fields to the eddy transport tensor K of "
        "`J = -K grad C` (m2 s-1; rows flux, columns gradient), its half-widths and a trust.",
        f"Family `{family}`: a host gives {needs}. Regressor `{manifest.get('regressor', '-')}`, "
        f"target `{manifest.get('target', '-')}`.",
        "## Read this first",
        "\n".join(f"* {text}" for text in CAUTIONS),
        "## Not for",
        "\n".join(f"* {text}" for text in NOT_FOR),
        "## Trained on",
        _training(manifest),
        "## Regime",
        "Of all regions, held-out ones included; outside it trust falls and the fallback speaks.",
        _regime(manifest),
        "## Scores",
        "Coefficients of determination of eddy fluxes of tracers that were never used; training "
        "regions are scored by closures that did not see them.",
        _scores(manifest),
        "### By kind of fold",
        "Random folds flatter: neighbouring cells lie on both sides. Believe the region folds.",
        _folds(manifest),
        "## Constraints",
        f"Eigenvalues of the symmetric part lie between {bounds.get('floor', '-')} and "
        f"{bounds.get('cap', '-')} m2 s-1 by construction. As trust falls from 1 to 0 the tensor "
        f"blends into `{fallback.get('name', '-')}`.",
        _audit(manifest),
        "## Half-widths",
        _half_widths(manifest),
        "## Inputs",
        _inputs(manifest),
        "## Checking and running it",
        "`learnclosure verify BUNDLE` checks sums and graph and recomputes the reference points; "
        "`learnclosure predict BUNDLE IN OUT` applies it to a NetCDF file of mean fields. "
        "`sha256sum -c SHA256SUMS` checks the files without any of this software. "
        "Where an input is not finite the graph gives the floor, no half-width and trust 0. "
        + _single(manifest),
        "## Licence and citation",
        f"SPDX: {manifest.get('licence', '-')}. Cite as: {manifest.get('citation', '-')}.",
    ]
    return "\n\n".join(parts) + "\n"
