"""Whether a manifest has the form it declares and says what the graph says."""

from __future__ import annotations

import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from onnx import ModelProto

from learnclosure.errors import BundleError
from learnclosure.export.checks import Check, RefusalError
from learnclosure.export.layout import MANIFEST_FILE, SCHEMA
from learnclosure.quantities import INPUTS, OUTPUTS, Quantity

FIELDS: dict[str, type] = {
    "schema": str,
    "name": str,
    "version": str,
    "licence": str,
    "family": str,
    "regressor": str,
    "target": str,
    "conventions": dict,
    "graph": dict,
    "inputs": list,
    "outputs": list,
    "features": list,
    "bounds": dict,
    "fallback": dict,
    "training": dict,
    "evaluation": dict,
    "reference": dict,
    "agreement": dict,
}


def parse_manifest(content: bytes, folder: Path) -> dict[str, Any]:
    """Read a manifest.

    Parameters
    ----------
    content : bytes
    folder : Path
        The bundle, for the message.

    Returns
    -------
    dict

    Raises
    ------
    BundleError
        If it is not a JSON object.
    """
    try:
        manifest = json.loads(content)
    except (ValueError, RecursionError):
        manifest = None
    if not isinstance(manifest, dict):
        raise BundleError(
            "is not a JSON object",
            where=folder / MANIFEST_FILE,
            expected="the manifest of a bundle",
            remedy="give the folder that 'learnclosure export' wrote",
        )
    return manifest


def check_manifest(manifest: Mapping[str, Any], model: ModelProto) -> list[Check]:
    """Check the form of a manifest and hold it against the graph.

    Parameters
    ----------
    manifest : mapping
    model : onnx.ModelProto
        A graph that passed its own checks.

    Returns
    -------
    list of Check
    """
    checks: list[Check] = []
    for name, step in (
        ("manifest form", _check_form),
        ("declared inputs", _check_inputs),
        ("declared outputs", _check_outputs),
    ):
        try:
            checks.append(Check(name, True, step(manifest, model)))
        except RefusalError as refusal:
            return [*checks, Check(name, False, str(refusal))]
    return checks


def _check_form(manifest: Mapping[str, Any], model: ModelProto) -> str:
    if manifest.get("schema") != SCHEMA:
        raise RefusalError(f"schema {manifest.get('schema')!r}, not {SCHEMA!r}")
    for name, kind in FIELDS.items():
        if not isinstance(manifest.get(name), kind):
            raise RefusalError(f"no {kind.__name__} under {name}")
    properties = {entry.key: entry.value for entry in model.metadata_props}
    for name, entry in (
        ("family", "family"),
        ("regressor", "regressor"),
        ("target", "target"),
        ("version", "bundle_version"),
        ("licence", "licence"),
    ):
        if properties.get(entry) != manifest[name]:
            raise RefusalError(f"{name} {manifest[name]!r}, {properties.get(entry)!r} in the graph")
    return f"schema {SCHEMA}, {manifest['name']} {manifest['version']}"


def _check_rows(rows: list[Any], names: list[str], table: Mapping[str, Quantity]) -> str:
    declared = [row.get("name") if isinstance(row, dict) else None for row in rows]
    if declared != names:
        raise RefusalError(f"{declared}, {names} in the graph")
    for row in rows:
        quantity = table.get(row["name"])
        if quantity is None:
            raise RefusalError(f"{row['name']} is not a known quantity")
        if row.get("units") != quantity.units or row.get("dtype") != "float64":
            raise RefusalError(f"{row['name']} in {row.get('units')!r} of {row.get('dtype')!r}")
    return f"{len(names)}, as in the graph"


def _check_inputs(manifest: Mapping[str, Any], model: ModelProto) -> str:
    return _check_rows(manifest["inputs"], [value.name for value in model.graph.input], INPUTS)


def _check_outputs(manifest: Mapping[str, Any], model: ModelProto) -> str:
    names = [value.name for value in model.graph.output]
    if names != list(OUTPUTS):
        raise RefusalError(f"the graph gives {names}, not {list(OUTPUTS)}")
    return _check_rows(manifest["outputs"], names, OUTPUTS)
