"""Shipping a closure: graph, manifest, reference points, card and sums, checked on the way."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt
from onnx import ModelProto, TensorProto
from onnx.reference import ReferenceEvaluator

from learnclosure import __version__
from learnclosure.atomic import atomic_folder
from learnclosure.errors import BundleError, CheckFailedError
from learnclosure.export.gate import verify_bundle
from learnclosure.export.graph import build_graph
from learnclosure.export.layout import (
    CARD_FILE,
    GRAPH_FILE,
    MANIFEST_FILE,
    REFERENCE_FILE,
    SCHEMA,
    SINGLE_FILE,
    SUMS_FILE,
    sums_text,
)
from learnclosure.export.manifest import make_manifest, manifest_text
from learnclosure.export.reference import (
    AGREEMENT_LIMIT,
    SINGLE_LIMIT,
    largest_difference,
    reference_file,
    with_tails,
)
from learnclosure.export.runtime import open_session, run_session
from learnclosure.quantities import OUTPUTS

if TYPE_CHECKING:
    from learnclosure.closures.closure import Closure
    from learnclosure.study import ExportSettings

FloatArray = npt.NDArray[np.float64]

SINGLE_MARGIN = 2.0
"""Stated tolerance of single precision over the difference met."""


def export_bundle(
    closure: Closure,
    folder: Path,
    *,
    provenance: Mapping[str, Any],
    evaluation: Mapping[str, Any],
    reference_inputs: Mapping[str, FloatArray],
    settings: ExportSettings,
    render_card: Callable[[dict[str, Any]], str],
) -> None:
    """Write a closure as a bundle a receiver can verify and run.

    The bundle appears as a whole or not at all. Before that the graph is run by
    onnxruntime and by the reference evaluator of the ONNX project, and both are held
    against the closure itself; then the bundle passes the receiver's own gate.

    Parameters
    ----------
    closure : Closure
        Fitted.
    folder : Path
        Folder of the bundle; what stands there is replaced.
    provenance : mapping
        What the closure was trained from and with, JSON-safe.
    evaluation : mapping
        Contents of ``evaluation.json``.
    reference_inputs : mapping of str to ndarray, shape (point,)
        Points of the regions, in SI units, with at least the closure's inputs.
    settings : ExportSettings
        Version, licence.
    render_card : callable
        Makes the text of the model card from the manifest.

    Raises
    ------
    BundleError
        If the closure cannot be written as a graph or an input has no reference points.
    CheckFailedError
        If graph and closure do not agree, or the bundle fails its own gate.
    OutputError
        If the folder cannot be written.
    """
    drawn = _drawn_inputs(closure, reference_inputs)
    inputs = with_tails(drawn)
    expected = _closure_outputs(closure, inputs)
    metadata = {"bundle_version": settings.version, "schema": SCHEMA, "licence": settings.licence}
    model = build_graph(closure, metadata)
    content = model.SerializeToString(deterministic=True)
    agreement = measure_agreement(model, content, inputs, expected)
    _require_agreement(agreement)
    variant = None
    if settings.single_precision:
        variant = single_variant(closure, metadata, inputs, expected)
    manifest = make_manifest(
        closure,
        settings,
        provenance=provenance,
        evaluation=evaluation,
        reference_inputs=drawn,
        points=len(next(iter(inputs.values()))),
        agreement=agreement,
        single=None if variant is None else variant[1],
    )
    files = {
        GRAPH_FILE: content,
        **({} if variant is None else {SINGLE_FILE: variant[0]}),
        MANIFEST_FILE: manifest_text(manifest),
        REFERENCE_FILE: reference_file(
            inputs,
            expected,
            {
                "title": f"reference points of the closure {manifest['name']}",
                "source": f"learnclosure {__version__}",
                "bundle_version": settings.version,
            },
        ),
        CARD_FILE: render_card(manifest).encode(),
    }
    files[SUMS_FILE] = sums_text(files)
    with atomic_folder(folder) as temporary:
        for name, text in files.items():
            (temporary / name).write_bytes(text)
        outcome = verify_bundle(temporary)
        if not outcome.passed:
            failed = [
                f"{check.name} ({check.rule}: {check.found})"
                for check in outcome.checks
                if not check.passed
            ]
            raise CheckFailedError(
                f"the bundle does not pass its own gate: {'; '.join(failed)}", where=folder
            )


def single_variant(
    closure: Closure,
    metadata: Mapping[str, str],
    inputs: Mapping[str, FloatArray],
    expected: Mapping[str, FloatArray],
) -> tuple[bytes, dict[str, Any]] | None:
    """Write the variant whose regressor computes in single precision.

    Parameters
    ----------
    closure : Closure
    metadata : mapping of str to str
        Properties of the model.
    inputs, expected : mapping of str to ndarray, shape (point,)
        Reference points, and what the closure makes of them.

    Returns
    -------
    content : bytes
        The graph.
    record : dict
        What the manifest says of it: its tolerance is twice the largest difference met,
        since other processors round differently.

    ``None`` stands for both if single precision would change nothing (trees compare and add
    in double), or too much: beyond ``SINGLE_LIMIT`` of the spread of an output.
    """
    model = build_graph(closure, metadata, single=True)
    if not any(tensor.data_type == TensorProto.FLOAT for tensor in model.graph.initializer):
        return None
    content = model.SerializeToString(deterministic=True)
    found = run_session(open_session(content), inputs, list(OUTPUTS))
    difference, place = largest_difference(found, expected)
    tolerance = float(f"{SINGLE_MARGIN * difference:.1e}")
    if not 0.0 < tolerance <= SINGLE_LIMIT:
        return None
    return content, {
        "file": SINGLE_FILE,
        "tolerance": tolerance,
        "met_in": place,
        "meaning": "largest difference from the closure, over the spread of an output; products "
        "of the regressor are single, all else is double",
    }


def measure_agreement(
    model: ModelProto,
    content: bytes,
    inputs: Mapping[str, FloatArray],
    expected: Mapping[str, FloatArray],
) -> dict[str, float]:
    """Run a graph in two ways and compare both with the closure.

    Parameters
    ----------
    model : onnx.ModelProto
    content : bytes
        The same, serialised.
    inputs, expected : mapping of str to ndarray, shape (point,)
        Reference points, and what the closure makes of them.

    Returns
    -------
    dict of str to float
        Largest differences over the spread of the output.
    """
    names = list(OUTPUTS)
    run = run_session(open_session(content), inputs, names)
    columns = {name: values[:, None] for name, values in inputs.items()}
    # Points far outside what was trained may overflow on the way to a clipped value.
    with np.errstate(all="ignore"):
        plain = ReferenceEvaluator(model).run(names, columns)
    evaluated = {name: values[:, 0] for name, values in zip(names, plain, strict=True)}
    return {
        "closure_and_onnxruntime": largest_difference(run, expected)[0],
        "reference_evaluator_and_onnxruntime": largest_difference(run, evaluated)[0],
    }


def _require_agreement(agreement: Mapping[str, float]) -> None:
    for pair, difference in agreement.items():
        if not difference <= AGREEMENT_LIMIT:
            raise CheckFailedError(
                f"{pair.replace('_', ' ')} disagree",
                where="export",
                found=f"{difference:.1e} of the spread of an output",
                expected=f"at most {AGREEMENT_LIMIT:.0e}",
                remedy="do not ship this closure; report the regressor it uses",
            )


def _drawn_inputs(
    closure: Closure, reference_inputs: Mapping[str, FloatArray]
) -> dict[str, FloatArray]:
    missing = [name for name in closure.inputs_ if name not in reference_inputs]
    if missing:
        raise BundleError(
            "no reference points for an input of the closure",
            where="export",
            found=", ".join(missing),
            remedy="compute the inputs of the regions the closure was trained on",
        )
    drawn = {name: np.asarray(reference_inputs[name], dtype=np.float64) for name in closure.inputs_}
    if not len(next(iter(drawn.values()))):
        raise BundleError(
            "there are no reference points", where="export", remedy="give at least one point"
        )
    return drawn


def _closure_outputs(closure: Closure, inputs: Mapping[str, FloatArray]) -> dict[str, FloatArray]:
    prediction = closure.predict(inputs)
    columns = (*prediction.tensor.T, *prediction.half_width.T, prediction.trust)
    return {
        name: np.ascontiguousarray(values) for name, values in zip(OUTPUTS, columns, strict=True)
    }
