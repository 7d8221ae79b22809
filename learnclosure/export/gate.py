"""What a receiver checks before and after loading a bundle.

Sums prove that files arrived as they were written, not who wrote them; the checks of the
graph therefore hold for files of any origin.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from onnx import ModelProto

from learnclosure.export.checks import Check, VerifyReport
from learnclosure.export.graph_checks import inspect_graph
from learnclosure.export.layout import (
    GRAPH_FILE,
    MANIFEST_FILE,
    REFERENCE_FILE,
    SUMS_FILE,
    read_files,
    require_bundle,
    sums_text,
)
from learnclosure.export.manifest_checks import check_manifest, parse_manifest
from learnclosure.export.reference import AGREEMENT_LIMIT, largest_difference, read_reference


@dataclass(frozen=True)
class Contents:
    """What a bundle holds, once it has passed every check that runs nothing.

    Attributes
    ----------
    files : dict of str to bytes
    manifest : dict
    model : onnx.ModelProto
        The graph.
    """

    files: dict[str, bytes]
    manifest: dict[str, Any]
    model: ModelProto


def inspect_bundle(folder: Path) -> tuple[list[Check], Contents | None]:
    """Make every check of a bundle that runs nothing of it.

    Parameters
    ----------
    folder : Path

    Returns
    -------
    checks : list of Check
        Those made, up to the first group with a failure.
    contents : Contents or None
        What was read, if every check passed.

    Raises
    ------
    BundleError
        If the folder is not a bundle at all or cannot be read.
    """
    require_bundle(folder)
    files, problem = read_files(folder)
    checks = [Check("files", problem is None, problem or f"{len(files)} as expected")]
    if problem is not None:
        return checks, None
    intact = files[SUMS_FILE] == sums_text(files)
    checks.append(Check("sums", intact, "SHA-256 match" if intact else _changed(files)))
    if not intact:
        return checks, None
    manifest = parse_manifest(files[MANIFEST_FILE], folder)
    model, graph_checks = inspect_graph(files[GRAPH_FILE])
    checks += graph_checks
    if model is None:
        return checks, None
    checks += check_manifest(manifest, model)
    if not all(check.passed for check in checks):
        return checks, None
    return checks, Contents(files, manifest, model)


def _changed(files: dict[str, bytes]) -> str:
    written = set(files[SUMS_FILE].splitlines())
    for line in sums_text(files).splitlines():
        if line not in written:
            return f"{line.split()[-1].decode()} or its sum was changed"
    return f"{SUMS_FILE} lists something else"


def verify_bundle(folder: str | Path) -> VerifyReport:
    """Check a bundle: files, sums, graph, declared quantities, reference outputs.

    Only a graph that passes every static check is loaded; then the reference points are
    computed again and compared with the outputs the closure gave, within
    ``AGREEMENT_LIMIT`` of the spread of each output. Nothing a bundle says of itself
    changes that limit.

    Parameters
    ----------
    folder : str or Path

    Returns
    -------
    VerifyReport

    Raises
    ------
    BundleError
        If the folder is not a bundle at all or cannot be read.
    """
    place = Path(folder)
    checks, contents = inspect_bundle(place)
    if contents is not None:
        checks += _check_reference(contents)
    return VerifyReport(place, tuple(checks))


def _check_reference(contents: Contents) -> list[Check]:
    graph = contents.model.graph
    names = [value.name for value in graph.output]
    try:
        inputs, expected = read_reference(
            contents.files[REFERENCE_FILE], [value.name for value in graph.input], names
        )
    except (OSError, ValueError, KeyError, RuntimeError, TypeError) as error:
        return [Check("reference points", False, str(error))]
    count = len(expected[names[0]])
    declared = contents.manifest["reference"].get("points")
    agreed = count > 0 and count == declared
    checks = [Check("reference points", agreed, f"{count}, {declared} declared")]
    if agreed:
        checks.append(_recompute(contents.files[GRAPH_FILE], inputs, expected))
    return checks


def _recompute(content: bytes, inputs: dict[str, Any], expected: dict[str, Any]) -> Check:
    from learnclosure.export.runtime import open_session, run_session

    name = "reference outputs"
    try:
        found = run_session(open_session(content), inputs, list(expected))
    except Exception as error:  # the runtime raises many classes of its own
        return Check(name, False, f"the graph does not run: {str(error).splitlines()[0]}")
    difference, place = largest_difference(found, expected)
    return Check(
        name,
        difference <= AGREEMENT_LIMIT,
        f"{difference:.1e} of the spread of {place}, at most {AGREEMENT_LIMIT:.0e}",
        difference,
        AGREEMENT_LIMIT,
    )
