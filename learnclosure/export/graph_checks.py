"""What a graph must satisfy before any runtime is allowed to see it.

Public runtimes refuse some hostile graphs, but not endless loops, allocations without
bound or data beside the file. So only a closed list of operators, attributes and types
passes here, without subgraphs, functions or external data, with finite constants and
sound trees, and with a known number of values per point for everything computed.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator

import numpy as np
from onnx import AttributeProto, ModelProto, TensorProto, checker, shape_inference
from onnx import numpy_helper as tensors

from learnclosure.export.checks import Check, RefusalError
from learnclosure.export.operators import (
    BATCH,
    IR_VERSION,
    ML_DOMAIN,
    ML_OPSET,
    OPERATORS,
    OPSET,
)
from learnclosure.export.tree_checks import check_trees

LARGEST_NODES = 20_000
LARGEST_VALUES = 8_192
"""Most numbers one computed value may hold for each point."""
LARGEST_TOTAL = 131_072
"""Most numbers all computed values together may hold for each point."""
ATTRIBUTE_TYPES = (AttributeProto.INT, AttributeProto.INTS, AttributeProto.TENSOR)
CONSTANT_TYPES = (TensorProto.DOUBLE, TensorProto.INT64, TensorProto.UINT8)
CAST_TYPES = (TensorProto.DOUBLE, TensorProto.FLOAT, TensorProto.INT64)
VALUE_TYPES = (*CAST_TYPES, TensorProto.BOOL)


def inspect_graph(content: bytes) -> tuple[ModelProto | None, list[Check]]:
    """Check a serialised graph without running it.

    Parameters
    ----------
    content : bytes

    Returns
    -------
    model : onnx.ModelProto or None
        The graph if every check passed.
    checks : list of Check
        Those made, up to the first that failed.
    """
    try:
        model = ModelProto.FromString(content)
    except Exception:  # protobuf's own class of error carries no types
        return None, [Check("graph format", False, "not an ONNX model")]
    steps: list[tuple[str, Callable[[ModelProto], str]]] = [
        ("graph format", _check_format),
        ("graph operators", _check_operators),
        ("graph constants", _check_constants),
        ("graph connections", _check_connections),
        ("graph shapes", _check_shapes),
        ("graph trees", _check_trees),
    ]
    checks: list[Check] = []
    for name, step in steps:
        try:
            checks.append(Check(name, True, step(model)))
        except RefusalError as refusal:
            return None, [*checks, Check(name, False, str(refusal))]
    return model, checks


def _check_format(model: ModelProto) -> str:
    if model.ir_version != IR_VERSION:
        raise RefusalError(f"IR version {model.ir_version}, not {IR_VERSION}")
    imports = sorted((entry.domain, entry.version) for entry in model.opset_import)
    if imports != [("", OPSET), (ML_DOMAIN, ML_OPSET)]:
        raise RefusalError(f"operator sets {imports}")
    graph = model.graph
    for what, present in (
        ("functions", model.functions),
        ("training information", model.training_info),
        ("sparse constants", graph.sparse_initializer),
        ("quantisation", graph.quantization_annotation),
        ("declared shapes of inner values", graph.value_info),
    ):
        if present:
            raise RefusalError(f"holds {what}")
    if not graph.input or not graph.output or not 0 < len(graph.node) <= LARGEST_NODES:
        raise RefusalError(f"{len(graph.node)} nodes")
    for value in (*graph.input, *graph.output):
        if not value.type.HasField("tensor_type"):
            raise RefusalError(f"{value.name} is not an array")
        kind = value.type.tensor_type
        dims = [dim.dim_param or dim.dim_value for dim in kind.shape.dim]
        if kind.elem_type != TensorProto.DOUBLE or dims != [BATCH, 1]:
            raise RefusalError(f"{value.name} is not a double of shape ({BATCH}, 1)")
    return f"{len(graph.node)} nodes, IR {IR_VERSION}, operator sets {OPSET} and {ML_OPSET}"


def _check_operators(model: ModelProto) -> str:
    for node in model.graph.node:
        allowed = OPERATORS.get((node.domain, node.op_type))
        if allowed is None or node.overload:
            raise RefusalError(f"operator {node.domain or 'onnx'}.{node.op_type} is not allowed")
        for attribute in node.attribute:
            known = attribute.name in allowed and attribute.type in ATTRIBUTE_TYPES
            if not known or attribute.ref_attr_name:
                raise RefusalError(f"{node.op_type} with attribute {attribute.name}")
            if node.op_type == "Cast" and attribute.i not in CAST_TYPES:
                raise RefusalError(f"Cast to type {attribute.i}")
    kinds = {node.op_type for node in model.graph.node}
    return f"{len(kinds)} kinds, all on the closed list"


def _constants(model: ModelProto) -> Iterator[TensorProto]:
    yield from model.graph.initializer
    for node in model.graph.node:
        for attribute in node.attribute:
            if attribute.type == AttributeProto.TENSOR:
                yield attribute.t


def _check_constants(model: ModelProto) -> str:
    count = 0
    for tensor in _constants(model):
        label = tensor.name or "a constant"
        if tensor.external_data or tensor.data_location != TensorProto.DEFAULT:
            raise RefusalError(f"{label} lies outside the file")
        if tensor.data_type not in CONSTANT_TYPES or tensor.HasField("segment"):
            raise RefusalError(f"{label} has type {tensor.data_type}")
        try:
            array = tensors.to_array(tensor)
        except (ValueError, TypeError):
            raise RefusalError(f"{label} does not have the size it declares") from None
        if not np.isfinite(array).all():
            raise RefusalError(f"{label} holds values that are not finite")
        count += array.size
    return f"{count} numbers, all finite and inside the file"


def _check_connections(model: ModelProto) -> str:
    graph = model.graph
    first = [*(value.name for value in graph.input), *(tensor.name for tensor in graph.initializer)]
    known = set(first)
    if len(known) != len(first) or "" in known:
        raise RefusalError("two inputs or constants share a name")
    for node in graph.node:
        for name in node.input:
            if name not in known:
                raise RefusalError(f"{node.op_type} takes {name!r}, which is not there yet")
        for name in node.output:
            if name in known or not name:
                raise RefusalError(f"{node.op_type} gives {name!r}, which is there already")
            known.add(name)
    for value in graph.output:
        if value.name not in known:
            raise RefusalError(f"nothing gives the output {value.name}")
    return f"{len(known)} values, each made once"


def _inferred(model: ModelProto) -> dict[str, list[int | str]]:
    """Return the shape of every value after checking types and shapes."""
    try:
        checker.check_model(model, full_check=True)
        graph = shape_inference.infer_shapes(model, check_type=True, strict_mode=True).graph
    except (checker.ValidationError, shape_inference.InferenceError, ValueError) as error:
        raise RefusalError(str(error).strip().splitlines()[0]) from None
    shapes: dict[str, list[int | str]] = {
        tensor.name: list(tensor.dims) for tensor in model.graph.initializer
    }
    for value in (*graph.input, *graph.value_info, *graph.output):
        kind = value.type.tensor_type
        if kind.elem_type not in VALUE_TYPES:
            raise RefusalError(f"{value.name} has type {kind.elem_type}")
        shapes[value.name] = [dim.dim_param or dim.dim_value for dim in kind.shape.dim]
    return shapes


def _check_shapes(model: ModelProto) -> str:
    shapes = _inferred(model)
    total = 0
    for node in model.graph.node:
        for name in node.output:
            size = 1
            dims = shapes.get(name, [])
            for dim in dims[1:]:
                size *= dim if isinstance(dim, int) else 0
            if not dims or dims[0] != BATCH or not 0 < size <= LARGEST_VALUES:
                raise RefusalError(f"{name} has shape {dims}")
            total += size
    if total > LARGEST_TOTAL:
        raise RefusalError(f"{total} numbers for each point")
    return f"{total} numbers for each point"


def _check_trees(model: ModelProto) -> str:
    shapes = _inferred(model)
    count = 0
    for node in model.graph.node:
        if node.op_type == "TreeEnsemble":
            dims = shapes[node.input[0]]
            features = dims[-1]
            if len(dims) != 2 or not isinstance(features, int):
                raise RefusalError(f"{node.name} takes an array of shape {dims}")
            count += check_trees(node, features)
    return f"{count} trees, all indices in range"
