"""Telling two bundles apart: what they say of themselves, what they compute, how fast."""

from __future__ import annotations

import math
import time
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.export.gate import Contents, load_bundle
from learnclosure.export.json_values import finite_number
from learnclosure.export.layout import GRAPH_FILE, REFERENCE_FILE
from learnclosure.export.reference import AGREEMENT_LIMIT, largest_difference, read_reference
from learnclosure.export.runtime import open_session, run_session

FloatArray = npt.NDArray[np.float64]

LABELS = ("name", "version", "licence", "family", "regressor", "target")
SCORES = ("flux_r2", "divergence_r2")
TOPICS = ("label", "input", "range", "bound", "score", "output")
ROUNDING = 1e-9
"""Share of a declared number below which two are the same."""
TIMED_POINTS = 4096
TIMED_RUNS = 7


@dataclass(frozen=True)
class Difference:
    """One thing in which two bundles differ.

    Attributes
    ----------
    topic : str
        One of ``TOPICS``.
    name : str
        What it is.
    first, second : str, float or None
        What either has; None if it has none.
    """

    topic: str
    name: str
    first: str | float | None
    second: str | float | None


@dataclass(frozen=True)
class Comparison:
    """Two bundles side by side.

    Attributes
    ----------
    differences : tuple of Difference
        All beyond rounding. Labels are among them but do not make bundles different.
    outputs : dict of str to float
        Largest difference of each output on the first bundle's reference inputs, over the
        spread of the first one's; empty if these lack an input of the second.
    seconds : tuple of two float
        Processor time of either for one point, s, taken in turns on its own reference points.
    """

    differences: tuple[Difference, ...]
    outputs: dict[str, float]
    seconds: tuple[float, float]

    @property
    def differs(self) -> bool:
        """Whether they compute or claim different things; labels and speed do not count."""
        return any(row.topic != "label" for row in self.differences)

    @property
    def speed_ratio(self) -> float:
        """Time of the second over time of the first."""
        return self.seconds[1] / self.seconds[0]

    def as_record(self) -> dict[str, Any]:
        """Return all of it as a JSON-safe dict."""
        return {
            "differs": self.differs,
            "differences": [vars(row) for row in self.differences],
            "outputs": {
                name: value if math.isfinite(value) else None
                for name, value in self.outputs.items()
            },
            "output_limit": AGREEMENT_LIMIT,
            "seconds_per_point": list(self.seconds),
            "speed_ratio": self.speed_ratio,
        }


def compare_bundles(first: str | Path, second: str | Path) -> Comparison:
    """Compare two bundles.

    Parameters
    ----------
    first, second : str or Path
        Folders or archives; both must pass the gate.

    Returns
    -------
    Comparison

    Raises
    ------
    BundleError
        If either cannot be used.
    """
    contents = (load_bundle(first), load_bundle(second))
    sessions = tuple(open_session(each.files[GRAPH_FILE]) for each in contents)
    points = tuple(_points(each) for each in contents)
    outputs = _compare_outputs(contents, sessions[1], points[0])
    rows = list(_declared(contents[0].manifest, contents[1].manifest))
    rows += [
        Difference("output", name, 0.0, value if math.isfinite(value) else None)
        for name, value in outputs.items()
        if not value <= AGREEMENT_LIMIT
    ]
    return Comparison(tuple(rows), outputs, _time(sessions, points))


def _names(values: Any) -> list[str]:
    return [value.name for value in values]


def _points(contents: Contents) -> dict[str, FloatArray]:
    graph = contents.model.graph
    return read_reference(contents.files[REFERENCE_FILE], _names(graph.input), [])[0]


def _compare_outputs(
    contents: tuple[Contents, Contents], session: Any, points: Mapping[str, FloatArray]
) -> dict[str, float]:
    """Run the second graph on the first one's reference inputs, where it can be."""
    if any(name not in points for name in _names(contents[1].model.graph.input)):
        return {}
    names = _names(contents[0].model.graph.output)
    truth = read_reference(contents[0].files[REFERENCE_FILE], [], names)[1]
    needed = {name: points[name] for name in _names(contents[1].model.graph.input)}
    found = run_session(session, needed, names)
    return {name: largest_difference({name: found[name]}, {name: truth[name]})[0] for name in names}


def _time(
    sessions: tuple[Any, ...], points: tuple[dict[str, FloatArray], ...]
) -> tuple[float, float]:
    """Time both graphs in turns, so that both meet the same machine."""
    feeds = [
        {name: np.resize(values, TIMED_POINTS) for name, values in each.items()} for each in points
    ]
    spent: tuple[list[float], list[float]] = ([], [])
    for _ in range(TIMED_RUNS):
        for number, (session, feed) in enumerate(zip(sessions, feeds, strict=True)):
            names = _names(session.get_outputs())
            start = time.thread_time()
            run_session(session, feed, names)
            spent[number].append(time.thread_time() - start)
    one, two = (float(np.median(times)) / TIMED_POINTS for times in spent)
    return one, two


def _declared(first: Mapping[str, Any], second: Mapping[str, Any]) -> Iterator[Difference]:
    """Give every difference in what two manifests declare."""
    for label in LABELS:
        if first[label] != second[label]:
            yield Difference("label", label, first[label], second[label])
    tables = ({row["name"]: row for row in each["inputs"]} for each in (first, second))
    one, two = tables
    for name in sorted(one.keys() ^ two.keys()):
        has = [name if name in table else None for table in (one, two)]
        yield Difference("input", name, has[0], has[1])
    for topic, numbers in (("range", _ranges), ("bound", _bounds), ("score", _scores)):
        mine, theirs = numbers(first), numbers(second)
        for name in sorted(mine.keys() | theirs.keys()):
            if not _same(mine.get(name), theirs.get(name)):
                yield Difference(topic, name, mine.get(name), theirs.get(name))


def _same(first: float | None, second: float | None) -> bool:
    if first is None or second is None:
        return first is second
    return math.isclose(first, second, rel_tol=ROUNDING, abs_tol=0.0)


def _ranges(manifest: Mapping[str, Any]) -> dict[str, float | None]:
    found: dict[str, float | None] = {}
    for rows, key in (("inputs", "range_in_regions"), ("features", "trained_range")):
        for row in manifest[rows]:
            for end, value in zip(("from", "to"), row[key], strict=True):
                found[f"{row['name']} {end}"] = finite_number(value)
    return found


def _bounds(manifest: Mapping[str, Any]) -> dict[str, float | None]:
    return {name: finite_number(manifest["bounds"].get(name)) for name in ("floor", "cap")}


def _scores(manifest: Mapping[str, Any]) -> dict[str, float | None]:
    """Return scores by region, kind and layer, skipping what has not their form."""
    found: dict[str, float | None] = {}
    regions = _table(_table(manifest["evaluation"], "closure"), "regions")
    for region in regions:
        scores = _table(_table(regions, region), "scores")
        for kind in SCORES:
            layers = scores.get(kind)
            for layer, value in enumerate(layers if isinstance(layers, list) else []):
                found[f"{region} {kind} layer {layer}"] = finite_number(value)
    return found


def _table(record: Mapping[str, Any], key: str) -> Mapping[str, Any]:
    value = record.get(key)
    return value if isinstance(value, dict) else {}
