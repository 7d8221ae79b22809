"""What a receiver checks before a bundle is loaded.

Sums prove that files arrived as they were written, not who wrote them; the checks of the
graph therefore hold for files of any origin, and only a signature says whose they are.
"""

from __future__ import annotations

from dataclasses import dataclass
from pathlib import Path
from typing import Any

from onnx import ModelProto

from learnclosure.errors import BundleError
from learnclosure.export.archive import read_archive
from learnclosure.export.bounded import run_trial
from learnclosure.export.checks import Check, RefusalError, VerifyReport, attempt
from learnclosure.export.graph_checks import inspect_graph
from learnclosure.export.layout import (
    GRAPH_FILE,
    MANIFEST_FILE,
    REFERENCE_FILE,
    SIGNATURE_FILE,
    SINGLE_FILE,
    SUMS_FILE,
    read_folder,
    require_bundle,
    sums_text,
)
from learnclosure.export.manifest_checks import check_manifest, check_schema, parse_manifest
from learnclosure.export.signature import check_signature


@dataclass(frozen=True)
class Contents:
    """What a bundle holds, once it has passed every check.

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


def inspect_bundle(
    place: Path, *, signers: Path | None = None
) -> tuple[list[Check], Contents | None]:
    """Make every check of a bundle that runs nothing of it.

    Parameters
    ----------
    place : Path
        Folder or archive.
    signers : Path, optional
        File of allowed signers; if given, the bundle must be signed by one of them.

    Returns
    -------
    checks : list of Check
        Those made, up to the first that failed.
    contents : Contents or None
        What was read, if every check passed.

    Raises
    ------
    BundleError
        If there is no bundle at all or it cannot be read.
    """
    require_bundle(place)
    files: dict[str, bytes] = {}
    manifest: dict[str, Any] = {}

    def read() -> str:
        files.update(read_archive(place) if place.is_file() else read_folder(place))
        signed = SIGNATURE_FILE in files and signers is None
        return f"{len(files)} as expected" + (", signature not checked" if signed else "")

    def schema() -> str:
        manifest.update(parse_manifest(files[MANIFEST_FILE]))
        return check_schema(manifest)

    first = [("files", read), ("sums", lambda: _check_sums(files))]
    if signers is not None:
        first.append(("signature", lambda: check_signature(files, signers)))
    checks: list[Check] = []
    for name, step in (*first, ("schema", schema)):
        checks.append(attempt(name, step))
        if not checks[-1].passed:
            return checks, None
    model, graph_checks = inspect_graph(files[GRAPH_FILE])
    checks += graph_checks
    if model is None:
        return checks, None
    checks += check_manifest(manifest, model)
    if checks[-1].passed and SINGLE_FILE in files:
        checks.append(attempt("single precision graph", lambda: _check_single(files, model)))
    return checks, Contents(files, manifest, model) if checks[-1].passed else None


def _check_sums(files: dict[str, bytes]) -> str:
    expected = sums_text(files)
    if files[SUMS_FILE] == expected:
        return "SHA-256 match"
    written = set(files[SUMS_FILE].splitlines())
    for line in expected.splitlines():
        if line not in written:
            raise RefusalError("sums", f"{line.split()[-1].decode()} or its sum was changed")
    raise RefusalError("sums", f"{SUMS_FILE} lists something else")


def _check_single(files: dict[str, bytes], model: ModelProto) -> str:
    variant, checks = inspect_graph(files[SINGLE_FILE], single=True)
    if variant is None:
        raise RefusalError(checks[-1].rule, f"{SINGLE_FILE}: {checks[-1].found}")
    for side in ("input", "output"):
        names, wanted = (
            [value.name for value in getattr(graph, side)] for graph in (variant.graph, model.graph)
        )
        if names != wanted:
            raise RefusalError("quantities", f"{SINGLE_FILE} has {side}s {names}, not {wanted}")
    return "as for the graph in double precision"


def open_bundle(place: Path, *, signers: Path | None = None) -> tuple[list[Check], Contents | None]:
    """Make every check of a bundle, those that run its graph in a process of its own.

    Parameters
    ----------
    place, signers
        As for ``inspect_bundle``.

    Returns
    -------
    checks : list of Check
    contents : Contents or None
        What was read, if every check passed.

    Raises
    ------
    BundleError
        If there is no bundle at all or it cannot be read.
    """
    checks, contents = inspect_bundle(place, signers=signers)
    if contents is not None:
        files = contents.files
        checks += run_trial(
            contents.manifest, files[GRAPH_FILE], files[REFERENCE_FILE], files.get(SINGLE_FILE)
        )
    return checks, contents if checks[-1].passed else None


def verify_bundle(folder: str | Path, *, signers: str | Path | None = None) -> VerifyReport:
    """Check a bundle: files, sums, graph, declared quantities, reference outputs.

    Only a graph that passes every static check is loaded; then the reference points are
    computed again, in a process with limits of memory and time, and compared with the
    outputs the closure gave, within ``AGREEMENT_LIMIT`` of the spread of each output.
    Nothing a bundle says of itself changes that limit.

    Parameters
    ----------
    folder : str or Path
        Folder or archive.
    signers : str or Path, optional
        File of allowed signers in the format of OpenSSH; if given, the bundle must carry a
        signature of one of them.

    Returns
    -------
    VerifyReport

    Raises
    ------
    BundleError
        If there is no bundle at all, it cannot be read, or a signature is asked for and
        ``ssh-keygen`` or the file of signers is missing.
    """
    place = Path(folder)
    checks, _ = open_bundle(place, signers=None if signers is None else Path(signers))
    return VerifyReport(place, tuple(checks))


def load_bundle(folder: str | Path, *, signers: str | Path | None = None) -> Contents:
    """Read a bundle that passes every check.

    Parameters
    ----------
    folder, signers
        As for ``verify_bundle``.

    Returns
    -------
    Contents

    Raises
    ------
    BundleError
        If there is no bundle, or a check failed; the message names the broken rule.
    """
    place = Path(folder)
    checks, contents = open_bundle(place, signers=None if signers is None else Path(signers))
    if contents is None:
        failed = next(check for check in checks if not check.passed)
        raise BundleError(
            f"the check of {failed.name} failed: {failed.found}",
            where=place,
            expected=f"rule {failed.rule}",
            remedy="do not load it; ask its author for an intact copy",
        )
    return contents
