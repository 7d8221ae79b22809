"""Checks of tree nodes and tables: every index in range, every tree a tree."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt
from onnx import ModelProto, NodeProto

from learnclosure.export.builder import attribute_values
from learnclosure.export.checks import RefusalError
from learnclosure.export.operators import (
    BRANCH_LEQ,
    BRANCH_LT,
    NO_TRANSFORM,
    SUM,
    TREE_INDEX_ATTRIBUTES,
)

IndexArray = npt.NDArray[np.int64]
LARGEST_TARGETS = 4096


def check_trees(node: NodeProto, features: int) -> int:
    """Check a ``TreeEnsemble`` node.

    Parameters
    ----------
    node : onnx.NodeProto
        Its attributes are known to be integers, lists of them and tensors.
    features : int
        Number of columns of its input.

    Returns
    -------
    int
        Number of trees.

    Raises
    ------
    RefusalError
        If an index is out of range, a node has two parents or none, or the node asks for
        anything but plain sums of leaf weights.
    """
    values = attribute_values(node)
    for name in (*TREE_INDEX_ATTRIBUTES, "nodes_splits", "nodes_modes", "leaf_weights"):
        column = values.get(name)
        if not isinstance(column, np.ndarray) or column.ndim != 1 or not column.size:
            raise RefusalError("tree-form", f"{node.name} lacks a list {name}")
    if values.get("aggregate_function") != SUM or values.get("post_transform") != NO_TRANSFORM:
        raise RefusalError("tree-form", f"{node.name} does more than add leaf weights")
    targets = values.get("n_targets")
    if not isinstance(targets, int) or not 0 < targets <= LARGEST_TARGETS:
        raise RefusalError("tree-form", f"{node.name} has {targets} targets")
    nodes, leaves = len(values["nodes_splits"]), len(values["leaf_weights"])
    for name, column in values.items():
        wanted = nodes if name.startswith("nodes_") else leaves
        if name.startswith(("nodes_", "leaf_")) and len(column) != wanted:
            raise RefusalError(
                "tree-form", f"{node.name}: {name} has {len(column)} entries, not {wanted}"
            )
    _within(node, "nodes_modes", values["nodes_modes"], {BRANCH_LEQ, BRANCH_LT})
    _below(node, "nodes_featureids", values["nodes_featureids"], features)
    _below(node, "leaf_targetids", values["leaf_targetids"], targets)
    _below(node, "tree_roots", values["tree_roots"], nodes)
    for side in ("true", "false"):
        flags = values[f"nodes_{side}leafs"]
        _within(node, f"nodes_{side}leafs", flags, {0, 1})
        limit = np.where(flags == 1, leaves, nodes)
        _below(node, f"nodes_{side}nodeids", values[f"nodes_{side}nodeids"], limit)
    _within(
        node, "nodes_missing_value_tracks_true", values["nodes_missing_value_tracks_true"], {0, 1}
    )
    _check_shape(node, values, nodes)
    return len(values["tree_roots"])


def _below(node: NodeProto, name: str, column: IndexArray, limit: int | IndexArray) -> None:
    if np.any(column < 0) or np.any(column >= limit):
        raise RefusalError("tree-indices", f"{node.name}: {name} has an index out of range")


def _within(node: NodeProto, name: str, column: npt.NDArray[Any], allowed: set[int]) -> None:
    if not set(np.unique(column).tolist()) <= allowed:
        raise RefusalError(
            "tree-indices", f"{node.name}: {name} has a value other than {sorted(allowed)}"
        )


def _check_shape(node: NodeProto, values: Mapping[str, Any], nodes: int) -> None:
    """Insist that every inner node is reached from the roots by exactly one way."""
    children = [
        values[f"nodes_{side}nodeids"][values[f"nodes_{side}leafs"] == 0]
        for side in ("true", "false")
    ]
    arrivals = np.bincount(np.concatenate([values["tree_roots"], *children]), minlength=nodes)
    if np.any(arrivals != 1):
        raise RefusalError(
            "tree-cycles", f"{node.name}: a tree has a node with two ways to it, or none"
        )
    # With one way to each node, what the roots do not reach can only be a cycle.
    reached = np.zeros(nodes, dtype=np.bool_)
    front = values["tree_roots"]
    while len(front):
        reached[front] = True
        following = [
            values[f"nodes_{side}nodeids"][front][values[f"nodes_{side}leafs"][front] == 0]
            for side in ("true", "false")
        ]
        front = np.concatenate(following)
    if not reached.all():
        raise RefusalError("tree-cycles", f"{node.name}: tree nodes form a cycle")


def check_gathers(model: ModelProto) -> int:
    """Insist that every look-up takes rows that are in its table.

    Runtimes refuse an index out of range only while they run, and generated code would read
    beside the table; so an index must be a leaf weight of a tree ensemble in which each
    target has one tree, and every such weight a whole number below the table's length.

    Parameters
    ----------
    model : onnx.ModelProto
        Its connections and trees are known to be sound.

    Returns
    -------
    int
        Number of look-ups.

    Raises
    ------
    RefusalError
        If an index can lie outside its table, or could not be shown not to.
    """
    makers = {name: node for node in model.graph.node for name in node.output}
    tables = {tensor.name: tensor for tensor in model.graph.initializer}
    gathers = [node for node in model.graph.node if node.op_type == "Gather"]
    for node in gathers:
        table = tables.get(node.input[0])
        cast = makers.get(node.input[1])
        trees = makers.get(cast.input[0]) if cast is not None and cast.op_type == "Cast" else None
        if table is None or trees is None or trees.op_type != "TreeEnsemble":
            raise RefusalError("gather-indices", f"{node.name} takes no index a tree gives")
        if any(attribute.i != 0 for attribute in node.attribute) or len(table.dims) == 0:
            raise RefusalError("gather-indices", f"{node.name} takes no rows")
        weights = _single_weights(trees)
        whole = np.array_equal(weights, np.floor(weights))
        if not whole or weights.min() < 0 or weights.max() >= table.dims[0]:
            raise RefusalError(
                "gather-indices",
                f"{node.name}: rows {weights.min():g} to {weights.max():g} of {table.dims[0]}",
            )
    return len(gathers)


def _single_weights(node: NodeProto) -> npt.NDArray[np.float64]:
    """Return all leaf weights of an ensemble in which each target has a tree of its own."""
    values = attribute_values(node)
    roots = values["tree_roots"]
    front, tree = roots, np.arange(len(roots))
    pairs: set[tuple[int, int]] = set()
    while len(front):
        following = []
        for side in ("true", "false"):
            child = values[f"nodes_{side}nodeids"][front]
            leaf = values[f"nodes_{side}leafs"][front] == 1
            targets = values["leaf_targetids"][child[leaf]]
            pairs.update(zip(tree[leaf].tolist(), targets.tolist(), strict=True))
            following.append((child[~leaf], tree[~leaf]))
        front, tree = (np.concatenate(parts) for parts in zip(*following, strict=True))
    targets_met = {target for _, target in pairs}
    if not len(pairs) == len(roots) == len(targets_met):
        raise RefusalError("gather-indices", f"{node.name}: a target has more than one tree")
    return np.asarray(values["leaf_weights"], dtype=np.float64)
