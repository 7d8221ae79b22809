"""Assembling an ONNX graph: shared constants, no node computed twice, stable names."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt
from onnx import AttributeProto, ModelProto, NodeProto, TensorProto, ValueInfoProto, helper
from onnx import numpy_helper as tensors

from learnclosure.export.operators import BATCH, IR_VERSION, ML_DOMAIN, ML_OPSET, OPSET


class GraphBuilder:
    """An ONNX graph under construction.

    Constants of equal type, shape and bytes are stored once, and a node with the same
    operator, inputs and attributes as an earlier one is not added again, so a graph
    depends only on what is computed and in which order.

    Parameters
    ----------
    single : bool, optional
        Whether emitters take products in single precision where they may.

    Examples
    --------
    >>> builder = GraphBuilder()
    >>> speed = builder.input("speed", "m s-1")
    >>> first = builder.node("Sqrt", [speed])
    >>> first == builder.node("Sqrt", [speed])
    True
    """

    def __init__(self, *, single: bool = False) -> None:
        self.single = single
        self._inputs: list[ValueInfoProto] = []
        self._outputs: list[ValueInfoProto] = []
        self._nodes: list[NodeProto] = []
        self._constants: dict[tuple[str, tuple[int, ...], bytes], TensorProto] = {}
        self._known: dict[bytes, tuple[str, ...]] = {}

    def input(self, name: str, documentation: str = "") -> str:
        """Declare a double input of shape (N, 1).

        Parameters
        ----------
        name : str
        documentation : str, optional

        Returns
        -------
        str
            The name.
        """
        self._inputs.append(_column(name, documentation))
        return name

    def output(self, name: str, value: str, documentation: str = "") -> None:
        """Declare a value as a double output of shape (N, 1).

        Parameters
        ----------
        name : str
        value : str
            Name of the value that becomes the output.
        documentation : str, optional
        """
        self._nodes.append(helper.make_node("Identity", [value], [name], name=f"Identity_{name}"))
        self._outputs.append(_column(name, documentation))

    def constant(self, value: npt.ArrayLike) -> str:
        """Store a constant, or find it again.

        Parameters
        ----------
        value : array-like
            Numbers become double; arrays of int64 and float32 keep their type.

        Returns
        -------
        str
            Its name.
        """
        array = np.array(value)
        if array.dtype not in (np.int64, np.float32) or array.ndim == 0:
            array = array.astype(np.float64)
        array = np.ascontiguousarray(array).reshape(array.shape)
        key = (array.dtype.str, array.shape, array.tobytes())
        if key not in self._constants:
            name = f"constant_{len(self._constants)}"
            self._constants[key] = tensors.from_array(array, name)
        return self._constants[key].name

    def node(self, operator: str, inputs: list[str], *, domain: str = "", **attributes: Any) -> str:
        """Add a node with one output, or find it again.

        Parameters
        ----------
        operator : str
        inputs : list of str
            Names of values.
        domain : str, optional
        **attributes
            Attributes of the operator.

        Returns
        -------
        str
            Name of its output.
        """
        return self.nodes(operator, inputs, 1, domain=domain, **attributes)[0]

    def nodes(
        self,
        operator: str,
        inputs: list[str],
        outputs: int,
        *,
        domain: str = "",
        **attributes: Any,
    ) -> tuple[str, ...]:
        """Add a node with several outputs, or find it again.

        Parameters
        ----------
        operator, inputs, domain, **attributes
            As for ``node``.
        outputs : int
            Number of outputs.

        Returns
        -------
        tuple of str
            Names of its outputs.
        """
        node = helper.make_node(operator, inputs, [], domain=domain, **attributes)
        key = node.SerializeToString(deterministic=True)
        if key not in self._known:
            node.name = f"{operator}_{len(self._nodes)}"
            endings = [""] if outputs == 1 else [f"_{number}" for number in range(outputs)]
            node.output.extend(f"value_{len(self._nodes)}{ending}" for ending in endings)
            self._nodes.append(node)
            self._known[key] = tuple(node.output)
        return self._known[key]

    def model(self, name: str, documentation: str, metadata: Mapping[str, str]) -> ModelProto:
        """Close the graph.

        Parameters
        ----------
        name : str
            Name of the graph.
        documentation : str
        metadata : mapping of str to str
            Properties of the model.

        Returns
        -------
        onnx.ModelProto
            Without nodes and constants that no output needs.
        """
        needed = {output.name for output in self._outputs}
        kept: list[NodeProto] = []
        for node in reversed(self._nodes):
            if needed.intersection(node.output):
                kept.append(node)
                needed.update(node.input)
        graph = helper.make_graph(
            kept[::-1],
            name,
            self._inputs,
            self._outputs,
            [tensor for tensor in self._constants.values() if tensor.name in needed],
            doc_string=documentation,
        )
        imports = [helper.make_opsetid("", OPSET), helper.make_opsetid(ML_DOMAIN, ML_OPSET)]
        model = helper.make_model(graph, opset_imports=imports, ir_version=IR_VERSION)
        helper.set_model_props(model, dict(metadata))
        return model


def _column(name: str, documentation: str) -> ValueInfoProto:
    return helper.make_tensor_value_info(
        name, TensorProto.DOUBLE, [BATCH, 1], doc_string=documentation
    )


def attribute_values(node: NodeProto) -> dict[str, Any]:
    """Return the attributes of a node as Python values and arrays.

    Parameters
    ----------
    node : onnx.NodeProto

    Returns
    -------
    dict of str to int, ndarray or other
    """
    values: dict[str, Any] = {}
    for attribute in node.attribute:
        if attribute.type == AttributeProto.INTS:
            values[attribute.name] = np.fromiter(attribute.ints, np.int64, len(attribute.ints))
        elif attribute.type == AttributeProto.TENSOR:
            values[attribute.name] = tensors.to_array(attribute.t)
        else:
            values[attribute.name] = helper.get_attribute_value(attribute)
    return values
