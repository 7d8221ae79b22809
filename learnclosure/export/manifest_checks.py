"""Whether a manifest has the form it declares and says what the graph says."""

from __future__ import annotations

import json
import math
import re
from collections.abc import Mapping
from typing import Any, NoReturn

from onnx import ModelProto
from onnx import numpy_helper as tensors

from learnclosure.export.checks import Check, RefusalError, attempt
from learnclosure.export.json_values import finite_number, number_pair
from learnclosure.export.layout import SCHEMA
from learnclosure.export.operators import BATCH
from learnclosure.quantities import FEATURES, INPUTS, OUTPUTS, Quantity

FIELDS: dict[str, type] = {
    "schema": str,
    "name": str,
    "version": str,
    "licence": str,
    "citation": str,
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
# Semantic Versioning 2.0.0: three numbers without leading zeros, then what may follow.
_VERSION = re.compile(
    r"(0|[1-9]\d*)\.(0|[1-9]\d*)\.(0|[1-9]\d*)(-[0-9A-Za-z.-]+)?(\+[0-9A-Za-z.-]+)?"
)
# SPDX specification, annex "SPDX license expressions"; whether an identifier is on the
# list is checked where a bundle is made.
_LICENCE = re.compile(r"\(*[A-Za-z0-9.+:-]+\)*( (AND|OR|WITH) \(*[A-Za-z0-9.+:-]+\)*)*")
LONGEST_LABEL = 200


def parse_manifest(content: bytes) -> dict[str, Any]:
    """Read a manifest.

    Parameters
    ----------
    content : bytes

    Returns
    -------
    dict

    Raises
    ------
    RefusalError
        If it is not one JSON object, a key stands twice or a number is not finite.
    """
    try:
        manifest = json.loads(
            content.decode(), object_pairs_hook=_distinct, parse_constant=_refuse_constant
        )
    except (ValueError, RecursionError):
        manifest = None
    if not isinstance(manifest, dict):
        raise RefusalError("manifest-json", "is not a JSON object")
    return manifest


def _distinct(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    found = dict(pairs)
    if len(found) < len(pairs):
        names = [name for name, _ in pairs]
        twice = next(name for name in found if names.count(name) > 1)
        raise RefusalError("manifest-json", f"key {twice!r} stands twice")
    return found


def _refuse_constant(text: str) -> NoReturn:
    raise RefusalError("manifest-json", f"holds {text}")


def check_schema(manifest: Mapping[str, Any]) -> str:
    """Insist on a schema this receiver knows.

    Parameters
    ----------
    manifest : mapping

    Returns
    -------
    str
        What was found.

    Raises
    ------
    RefusalError
    """
    schema = manifest.get("schema")
    if schema == SCHEMA:
        return f"schema {SCHEMA}"
    number = int(schema) if isinstance(schema, str) and re.fullmatch("[0-9]{1,9}", schema) else 0
    advice = ", a newer learnclosure wrote it" if number > int(SCHEMA) else ""
    raise RefusalError("schema-version", f"schema {_short(schema)}, not {SCHEMA!r}{advice}")


def check_manifest(manifest: Mapping[str, Any], model: ModelProto) -> list[Check]:
    """Check the form of a manifest and hold it against the graph.

    Parameters
    ----------
    manifest : mapping
        Its schema is known.
    model : onnx.ModelProto
        A graph that passed its own checks.

    Returns
    -------
    list of Check
        Those made, up to the first that failed.
    """
    checks: list[Check] = []
    for name, step in (
        ("manifest form", _check_form),
        ("declared inputs", _check_inputs),
        ("declared outputs", _check_outputs),
    ):
        checks.append(attempt(name, lambda step=step: step(manifest, model)))  # type: ignore[misc]
        if not checks[-1].passed:
            break
    return checks


def _short(value: object) -> str:
    text = repr(value)
    return text if len(text) <= LONGEST_LABEL else text[:LONGEST_LABEL] + "..."


def _check_form(manifest: Mapping[str, Any], model: ModelProto) -> str:
    for name, kind in FIELDS.items():
        if not isinstance(manifest.get(name), kind):
            raise RefusalError("manifest-fields", f"no {kind.__name__} under {name}")
    if not _VERSION.fullmatch(manifest["version"]):
        raise RefusalError("version", f"version {_short(manifest['version'])}")
    if not _LICENCE.fullmatch(manifest["licence"]):
        raise RefusalError("licence", f"licence {_short(manifest['licence'])}")
    properties = {entry.key: entry.value for entry in model.metadata_props}
    for name, entry in (
        ("family", "family"),
        ("regressor", "regressor"),
        ("target", "target"),
        ("version", "bundle_version"),
        ("licence", "licence"),
    ):
        if properties.get(entry) != manifest[name]:
            raise RefusalError(
                "manifest-graph",
                f"{name} {_short(manifest[name])}, {_short(properties.get(entry))} in the graph",
            )
    _check_bounds(manifest["bounds"])
    _check_trained_ranges(manifest["features"], model)
    return f"{manifest['name']} {manifest['version']}, {len(manifest['features'])} features"


def _check_bounds(bounds: Mapping[str, Any]) -> None:
    floor, cap = (finite_number(bounds.get(name)) for name in ("floor", "cap"))
    if floor is None or cap is None or not 0.0 < floor < cap:
        raise RefusalError("manifest-fields", "bounds without a floor below a cap")


def _check_trained_ranges(rows: list[Any], model: ModelProto) -> None:
    """Insist that the graph compares one value with both ends of every declared range."""
    below, above = _compared(model)
    names: set[str] = set()
    for row in rows:
        name = row.get("name") if isinstance(row, dict) else None
        if not isinstance(name, str) or name not in FEATURES or name in names:
            raise RefusalError("manifest-fields", f"a feature {_short(name)}")
        names.add(name)
        if row.get("units") != FEATURES[name].units:
            raise RefusalError("units", f"{name} in {_short(row.get('units'))}")
        low, high = number_pair(row.get("trained_range")) or (math.nan, math.nan)
        if not below.get(low, set()) & above.get(high, set()):
            raise RefusalError(
                "trained-ranges", f"{name}: {_short(row.get('trained_range'))} is not in the graph"
            )


def _compared(model: ModelProto) -> tuple[dict[float, set[str]], dict[float, set[str]]]:
    """Return which values are taken off a number, and which have it taken off, by number."""
    scalars = {
        tensor.name: float(tensors.to_array(tensor))
        for tensor in model.graph.initializer
        if not len(tensor.dims)
    }
    below: dict[float, set[str]] = {}
    above: dict[float, set[str]] = {}
    for node in model.graph.node:
        if node.op_type == "Sub":
            first, second = node.input
            if first in scalars:
                below.setdefault(scalars[first], set()).add(second)
            elif second in scalars:
                above.setdefault(scalars[second], set()).add(first)
    return below, above


def _check_rows(rows: list[Any], names: list[str], table: Mapping[str, Quantity]) -> str:
    declared = [row.get("name") if isinstance(row, dict) else None for row in rows]
    if declared != names:
        raise RefusalError("quantities", f"{_short(declared)}, {names} in the graph")
    for row in rows:
        name = row["name"]
        quantity = table.get(name)
        if quantity is None:
            raise RefusalError("quantities", f"{name} is not a known quantity")
        for key, value in (("units", quantity.units), ("parity", quantity.parity)):
            if row.get(key) != value:
                raise RefusalError(
                    "units", f"{name} with {key} {_short(row.get(key))}, not {value!r}"
                )
        if row.get("dtype") != "float64" or row.get("shape") != [BATCH, 1]:
            raise RefusalError(
                "shapes", f"{name} of {_short(row.get('dtype'))}, shape {_short(row.get('shape'))}"
            )
    return f"{len(names)}, as in the graph"


def _check_inputs(manifest: Mapping[str, Any], model: ModelProto) -> str:
    found = _check_rows(manifest["inputs"], [value.name for value in model.graph.input], INPUTS)
    for row in manifest["inputs"]:
        if number_pair(row.get("range_in_regions")) is None:
            raise RefusalError("input-ranges", f"{row['name']} has no range")
    return found


def _check_outputs(manifest: Mapping[str, Any], model: ModelProto) -> str:
    names = [value.name for value in model.graph.output]
    if names != list(OUTPUTS):
        raise RefusalError("quantities", f"the graph gives {names}, not {list(OUTPUTS)}")
    return _check_rows(manifest["outputs"], names, OUTPUTS)
