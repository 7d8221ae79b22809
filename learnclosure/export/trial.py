"""The part of the gate that runs a graph; for a process of its own with limits.

Everything here that could take too long or too much memory (reading a file of another's
making, loading and running a graph) happens in the child process that ``bounded`` starts.
"""

from __future__ import annotations

import dataclasses
import json
import sys
from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.export.checks import Check, RefusalError, attempt
from learnclosure.export.json_values import number_pair
from learnclosure.export.reference import (
    AGREEMENT_LIMIT,
    SINGLE_LIMIT,
    largest_difference,
    read_reference,
)
from learnclosure.quantities import OUTPUTS

FloatArray = npt.NDArray[np.float64]

BOUND_SLACK = 1e-9
"""Rounding allowed in eigenvalues, as a share of the upper bound."""


def trial(
    manifest: Mapping[str, Any], graph: bytes, reference: bytes, single: bytes | None
) -> list[Check]:
    """Read the reference points, hold them against the manifest and compute them again.

    Parameters
    ----------
    manifest : mapping
        Passed its own checks.
    graph : bytes
        Passed its own checks.
    reference : bytes
        Contents of ``reference.nc``, not looked at so far.
    single : bytes or None
        The variant in single precision, if there is one; passed its own checks.

    Returns
    -------
    list of Check
        Those made, up to the first that failed.
    """
    points: list[tuple[dict[str, FloatArray], dict[str, FloatArray]]] = []

    def read() -> str:
        points.append(_points(manifest, reference))
        return f"{len(points[0][1]['trust'])}, as declared"

    checks = [attempt("reference points", read)]
    if not checks[0].passed:
        return checks
    inputs, expected = points[0]
    checks.append(_recompute("reference outputs", graph, inputs, expected, AGREEMENT_LIMIT))
    if single is not None and checks[-1].passed:
        checks.append(_recompute_single(manifest, single, inputs, expected))
    return checks


def _points(
    manifest: Mapping[str, Any], reference: bytes
) -> tuple[dict[str, FloatArray], dict[str, FloatArray]]:
    names = [row["name"] for row in manifest["inputs"]]
    try:
        inputs, outputs = read_reference(reference, names, list(OUTPUTS))
    except (OSError, ValueError, KeyError, RuntimeError, TypeError, MemoryError) as error:
        raise RefusalError("reference-form", _first_line(error)) from None
    count = len(outputs["trust"])
    declared = manifest["reference"].get("points")
    drawn = manifest["reference"].get("region_points")
    if type(declared) is not int or count != declared or not count:
        raise RefusalError("reference-count", f"{count}, {declared!r} declared")
    if type(drawn) is not int or not 0 < drawn <= count:
        raise RefusalError("reference-count", f"{drawn!r} of {count} points lie in the regions")
    for row in manifest["inputs"]:
        values = inputs[row["name"]][:drawn]
        found = (float(values.min()), float(values.max()))
        if number_pair(row["range_in_regions"]) != found:
            raise RefusalError(
                "input-ranges", f"{row['name']}: {list(found)}, {row['range_in_regions']} declared"
            )
    _check_bounds(outputs, manifest["bounds"])
    return inputs, outputs


def _check_bounds(outputs: Mapping[str, FloatArray], bounds: Mapping[str, Any]) -> None:
    xx, xy, yx, yy = (outputs[f"transport_tensor_{pair}"] for pair in ("xx", "xy", "yx", "yy"))
    trust = outputs["trust"]
    with np.errstate(all="ignore"):
        middle, radius = 0.5 * (xx + yy), np.hypot(0.5 * (xx - yy), 0.5 * (xy + yx))
        slack = BOUND_SLACK * bounds["cap"]
        within = (
            (middle - radius >= bounds["floor"] - slack)
            & (middle + radius <= bounds["cap"] + slack)
            & (np.abs(0.5 * (yx - xy)) <= bounds["cap"] + slack)
            & (trust >= 0.0)
            & (trust <= 1.0)
        )
    if not within.all():
        raise RefusalError("declared-bounds", f"{int(np.sum(~within))} points lie outside")


def _recompute(
    name: str,
    graph: bytes,
    inputs: Mapping[str, FloatArray],
    expected: Mapping[str, FloatArray],
    limit: float,
    rule: str = "reference-outputs",
) -> Check:
    from learnclosure.export.runtime import open_session, run_session

    try:
        found = run_session(open_session(graph), inputs, list(expected))
    except Exception as error:  # the runtime raises many classes of its own
        memory = isinstance(error, MemoryError) or "alloc" in str(error)
        return Check(
            name,
            False,
            f"the graph does not run: {_first_line(error)}",
            rule="run-limits" if memory else rule,
        )
    difference, place = largest_difference(found, expected)
    passed = difference <= limit
    return Check(
        name,
        passed,
        f"{difference:.1e} of the spread of {place}, at most {limit:.0e}",
        difference,
        limit,
        "" if passed else rule,
    )


def _recompute_single(
    manifest: Mapping[str, Any],
    single: bytes,
    inputs: Mapping[str, FloatArray],
    expected: Mapping[str, FloatArray],
) -> Check:
    name, rule = "single precision", "single-precision"
    record = manifest.get("single_precision")
    stated = record.get("tolerance") if isinstance(record, dict) else None
    if not isinstance(stated, float) or not 0.0 < stated <= SINGLE_LIMIT:
        return Check(
            name, False, f"a tolerance of {stated!r}, at most {SINGLE_LIMIT:.0e}", rule=rule
        )
    return _recompute(name, single, inputs, expected, stated, rule)


def _first_line(error: Exception) -> str:
    return (str(error).strip().splitlines() or [type(error).__name__])[0]


def main() -> None:
    """Make the trial of what comes in on standard input and write the checks as JSON.

    The first line is a JSON object with the manifest and the sizes of what follows.
    """
    header = json.loads(sys.stdin.buffer.readline())
    parts = {name: sys.stdin.buffer.read(size) for name, size in header["sizes"].items()}
    checks: Sequence[Check] = trial(
        header["manifest"], parts["graph"], parts["reference"], parts.get("single")
    )
    sys.stdout.write(json.dumps([dataclasses.asdict(check) for check in checks]))
