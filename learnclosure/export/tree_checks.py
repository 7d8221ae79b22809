"""Checks of tree nodes: every index in range, every tree a tree."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import numpy.typing as npt
from onnx import NodeProto

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
            raise RefusalError(f"{node.name} lacks a list {name}")
    if values.get("aggregate_function") != SUM or values.get("post_transform") != NO_TRANSFORM:
        raise RefusalError(f"{node.name} does more than add leaf weights")
    targets = values.get("n_targets")
    if not isinstance(targets, int) or not 0 < targets <= LARGEST_TARGETS:
        raise RefusalError(f"{node.name} has {targets} targets")
    nodes, leaves = len(values["nodes_splits"]), len(values["leaf_weights"])
    for name, column in values.items():
        wanted = nodes if name.startswith("nodes_") else leaves
        if name.startswith(("nodes_", "leaf_")) and len(column) != wanted:
            raise RefusalError(f"{node.name}: {name} has {len(column)} entries, not {wanted}")
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
        raise RefusalError(f"{node.name}: {name} has an index out of range")


def _within(node: NodeProto, name: str, column: npt.NDArray[Any], allowed: set[int]) -> None:
    if not set(np.unique(column).tolist()) <= allowed:
        raise RefusalError(f"{node.name}: {name} has a value other than {sorted(allowed)}")


def _check_shape(node: NodeProto, values: Mapping[str, Any], nodes: int) -> None:
    """Insist that every inner node is reached from the roots by exactly one way."""
    children = [
        values[f"nodes_{side}nodeids"][values[f"nodes_{side}leafs"] == 0]
        for side in ("true", "false")
    ]
    arrivals = np.bincount(np.concatenate([values["tree_roots"], *children]), minlength=nodes)
    if np.any(arrivals != 1):
        raise RefusalError(f"{node.name}: a tree has a node with two ways to it, or none")
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
        raise RefusalError(f"{node.name}: tree nodes form a cycle")
