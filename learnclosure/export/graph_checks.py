"""What a graph must satisfy before any runtime is allowed to see it.

Public runtimes refuse some hostile graphs, but not endless loops, allocations without
bound or data beside the file. So only a closed list of fields, operators, attributes and
types passes here, with finite constants and sound trees, and with a known number of values
and operations per point for everything computed.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field

import numpy as np
from onnx import AttributeProto, ModelProto, NodeProto, TensorProto, checker, shape_inference
from onnx import numpy_helper as tensors

from learnclosure.export.checks import Check, RefusalError, attempt
from learnclosure.export.operators import (
    BATCH,
    IR_VERSION,
    ML_DOMAIN,
    ML_OPSET,
    OPERATORS,
    OPSET,
)
from learnclosure.export.tree_checks import check_gathers, check_trees
from learnclosure.export.wire import scan_graph

LARGEST_VALUES = 8_192
"""Most numbers one computed value may hold for each point."""
LARGEST_TOTAL = 131_072
"""Most numbers all computed values together may hold for each point."""
LARGEST_WORK = 1 << 24
"""Most multiplications, additions and comparisons for each point."""
ATTRIBUTE_TYPES = (AttributeProto.INT, AttributeProto.INTS, AttributeProto.TENSOR)
CONSTANT_TYPES = (TensorProto.DOUBLE, TensorProto.INT64, TensorProto.UINT8)
CAST_TYPES = (TensorProto.DOUBLE, TensorProto.FLOAT, TensorProto.INT64)
VALUE_TYPES = (*CAST_TYPES, TensorProto.BOOL)

Shape = list[int | str]


@dataclass
class _Subject:
    """A graph under inspection.

    Attributes
    ----------
    model : onnx.ModelProto
    constant_types : tuple of int
        Types its constants may have.
    shapes : dict of str to list
        Shape of every value, once types and shapes were checked.
    """

    model: ModelProto
    constant_types: tuple[int, ...]
    shapes: dict[str, Shape] = field(default_factory=dict)


def inspect_graph(content: bytes, *, single: bool = False) -> tuple[ModelProto | None, list[Check]]:
    """Check a serialised graph without running it.

    Parameters
    ----------
    content : bytes
    single : bool, optional
        Whether constants in single precision are allowed.

    Returns
    -------
    model : onnx.ModelProto or None
        The graph if every check passed.
    checks : list of Check
        Those made, up to the first that failed.
    """
    checks = [attempt("graph bytes", lambda: scan_graph(content))]
    if not checks[0].passed:
        return None, checks
    types = (*CONSTANT_TYPES, TensorProto.FLOAT) if single else CONSTANT_TYPES
    subject = _Subject(ModelProto.FromString(content), types)
    for name, step in STEPS.items():
        checks.append(attempt(name, lambda step=step: step(subject)))  # type: ignore[misc]
        if not checks[-1].passed:
            return None, checks
    return subject.model, checks


def _check_format(subject: _Subject) -> str:
    model = subject.model
    if model.ir_version != IR_VERSION:
        raise RefusalError("graph-versions", f"IR version {model.ir_version}, not {IR_VERSION}")
    imports = sorted((entry.domain, entry.version) for entry in model.opset_import)
    if imports != [("", OPSET), (ML_DOMAIN, ML_OPSET)]:
        raise RefusalError("graph-versions", f"operator sets {imports}")
    for key, count in Counter(entry.key for entry in model.metadata_props).items():
        if count > 1:
            raise RefusalError("metadata-keys", f"key {key!r} stands {count} times")
    graph = model.graph
    if not graph.input or not graph.output or not graph.node:
        raise RefusalError("graph-interface", f"{len(graph.node)} nodes")
    for value in (*graph.input, *graph.output):
        kind = value.type.tensor_type
        dims = [dim.dim_param or dim.dim_value for dim in kind.shape.dim]
        if kind.elem_type != TensorProto.DOUBLE or dims != [BATCH, 1]:
            raise RefusalError(
                "graph-interface", f"{value.name} is not a double of shape ({BATCH}, 1)"
            )
    return f"{len(graph.node)} nodes, IR {IR_VERSION}, operator sets {OPSET} and {ML_OPSET}"


def _check_operators(subject: _Subject) -> str:
    nodes = subject.model.graph.node
    for node in nodes:
        allowed = OPERATORS.get((node.domain, node.op_type))
        if allowed is None:
            operator = f"{node.domain or 'onnx'}.{node.op_type}"
            raise RefusalError("operators", f"operator {operator} is not allowed")
        for attribute in node.attribute:
            if attribute.name not in allowed or attribute.type not in ATTRIBUTE_TYPES:
                raise RefusalError("attributes", f"{node.op_type} with attribute {attribute.name}")
            if node.op_type == "Cast" and attribute.i not in CAST_TYPES:
                raise RefusalError("cast-types", f"Cast to type {attribute.i}")
    kinds = {node.op_type for node in nodes}
    return f"{len(kinds)} kinds, all on the closed list"


def _constants(model: ModelProto) -> Iterator[TensorProto]:
    yield from model.graph.initializer
    for node in model.graph.node:
        for attribute in node.attribute:
            if attribute.type == AttributeProto.TENSOR:
                yield attribute.t


def _check_constants(subject: _Subject) -> str:
    count = 0
    for tensor in _constants(subject.model):
        label = tensor.name or "a constant"
        if tensor.data_type not in subject.constant_types:
            raise RefusalError("constant-types", f"{label} has type {tensor.data_type}")
        try:
            array = tensors.to_array(tensor)
        except (ValueError, TypeError):
            raise RefusalError(
                "constant-sizes", f"{label} does not have the size it declares"
            ) from None
        if not np.isfinite(array).all():
            raise RefusalError("finite-weights", f"{label} holds values that are not finite")
        count += array.size
    return f"{count} numbers, all finite and inside the file"


def _check_connections(subject: _Subject) -> str:
    graph = subject.model.graph
    first = [*(value.name for value in graph.input), *(tensor.name for tensor in graph.initializer)]
    known = set(first)
    if len(known) != len(first) or "" in known:
        raise RefusalError("names", "two inputs or constants share a name")
    for node in graph.node:
        for name in node.input:
            if name not in known:
                raise RefusalError(
                    "order", f"{node.op_type} takes {name!r}, which is not there yet"
                )
        for name in node.output:
            if name in known or not name:
                raise RefusalError(
                    "names", f"{node.op_type} gives {name!r}, which is there already"
                )
            known.add(name)
    for value in graph.output:
        if value.name not in known:
            raise RefusalError("order", f"nothing gives the output {value.name}")
    return f"{len(known)} values, each made once"


def _inferred(model: ModelProto) -> dict[str, Shape]:
    """Return the shape of every value after checking types and shapes."""
    try:
        checker.check_model(model, full_check=True)
        graph = shape_inference.infer_shapes(model, check_type=True, strict_mode=True).graph
    except (checker.ValidationError, shape_inference.InferenceError, ValueError) as error:
        raise RefusalError("types-and-shapes", str(error).strip().splitlines()[0]) from None
    shapes: dict[str, Shape] = {
        tensor.name: list(tensor.dims) for tensor in model.graph.initializer
    }
    for value in (*graph.input, *graph.value_info, *graph.output):
        kind = value.type.tensor_type
        if kind.elem_type not in VALUE_TYPES:
            raise RefusalError("types-and-shapes", f"{value.name} has type {kind.elem_type}")
        shapes[value.name] = [dim.dim_param or dim.dim_value for dim in kind.shape.dim]
    return shapes


def _check_shapes(subject: _Subject) -> str:
    subject.shapes = _inferred(subject.model)
    total = work = 0
    for node in subject.model.graph.node:
        made = 0
        for name in node.output:
            size = 1
            dims = subject.shapes.get(name, [])
            for dim in dims[1:]:
                size *= dim if isinstance(dim, int) else 0
            if not dims or dims[0] != BATCH or not 0 < size <= LARGEST_VALUES:
                raise RefusalError("value-sizes", f"{name} has shape {dims}")
            made += size
        total += made
        work += made * _work(node, subject.shapes)
    if total > LARGEST_TOTAL:
        raise RefusalError("value-sizes", f"{total} numbers for each point")
    if work > LARGEST_WORK:
        raise RefusalError("work", f"{work} operations for each point, at most {LARGEST_WORK}")
    return f"{total} numbers and {work} operations for each point"


def _work(node: NodeProto, shapes: dict[str, Shape]) -> int:
    """Return an upper bound of the operations behind one number a node gives."""
    if node.op_type in {"MatMul", "ReduceSum"}:
        dims = shapes[node.input[0]]
        sizes = [dim if isinstance(dim, int) else 1 for dim in dims]
        # A product sums over the last axis; a sum may run over all of them.
        return (
            sizes[-1] if node.op_type == "MatMul" and sizes else int(np.prod(sizes, dtype=object))
        )
    if node.op_type == "TreeEnsemble":
        return max(len(attribute.ints) for attribute in node.attribute)
    return 1


def _check_trees(subject: _Subject) -> str:
    count = 0
    for node in subject.model.graph.node:
        if node.op_type == "TreeEnsemble":
            dims = subject.shapes[node.input[0]]
            features = dims[-1]
            if len(dims) != 2 or not isinstance(features, int):
                raise RefusalError("tree-form", f"{node.name} takes an array of shape {dims}")
            count += check_trees(node, features)
    tables = check_gathers(subject.model)
    return f"{count} trees and {tables} tables, all indices in range"


STEPS: dict[str, Callable[[_Subject], str]] = {
    "graph format": _check_format,
    "graph operators": _check_operators,
    "graph constants": _check_constants,
    "graph connections": _check_connections,
    "graph shapes": _check_shapes,
    "graph trees": _check_trees,
}
