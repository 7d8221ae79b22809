"""Binary trees of any origin as one ``TreeEnsemble`` node, all in double precision."""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
import numpy.typing as npt
from onnx import numpy_helper as tensors

from learnclosure.export.builder import GraphBuilder
from learnclosure.export.operators import ML_DOMAIN, NO_TRANSFORM, SUM

FloatArray = npt.NDArray[np.float64]
IndexArray = npt.NDArray[np.int64]


@dataclass(frozen=True)
class BinaryTree:
    """One tree; node 0 is its root.

    Attributes
    ----------
    left, right : ndarray of int, shape (node,)
        Children; -1 at leaves. Left is taken where the comparison holds.
    feature : ndarray of int, shape (node,)
        Feature compared; anything at leaves.
    threshold : ndarray, shape (node,)
        What it is compared with, in the units of the feature.
    missing_left : ndarray of bool, shape (node,)
        Where a value that is not a number goes.
    """

    left: IndexArray
    right: IndexArray
    feature: IndexArray
    threshold: FloatArray
    missing_left: npt.NDArray[np.bool_]

    @property
    def is_leaf(self) -> npt.NDArray[np.bool_]:
        """Which nodes are leaves, shape (node,)."""
        return np.asarray(self.left < 0)


@dataclass
class TreeTable:
    """Trees gathered for one node of the graph; each adds one leaf weight to one target.

    Attributes
    ----------
    targets : int
        Number of targets.
    """

    targets: int
    _columns: dict[str, list[npt.NDArray[Any]]] = field(default_factory=dict)
    _roots: list[int] = field(default_factory=list)
    _nodes: int = 0
    _leaves: int = 0

    @property
    def leaves(self) -> int:
        """Number of leaves so far."""
        return self._leaves

    def add(self, tree: BinaryTree, target: int, weights: FloatArray) -> None:
        """Add a tree.

        Parameters
        ----------
        tree : BinaryTree
        target : int
            Target its leaf weights are added to.
        weights : ndarray, shape (leaf,)
            Weight of each leaf, in the order of the tree's nodes.
        """
        leaf = tree.is_leaf
        place = np.where(
            leaf, self._leaves + np.cumsum(leaf) - 1, self._nodes + np.cumsum(~leaf) - 1
        )
        inner = np.flatnonzero(~leaf)
        if len(inner):
            left, right = tree.left[inner], tree.right[inner]
            rows = {
                "nodes_featureids": tree.feature[inner],
                "nodes_splits": tree.threshold[inner],
                "nodes_missing_value_tracks_true": tree.missing_left[inner],
                "nodes_truenodeids": place[left],
                "nodes_trueleafs": leaf[left],
                "nodes_falsenodeids": place[right],
                "nodes_falseleafs": leaf[right],
            }
        else:
            # A lone leaf is written as a comparison both of whose ways lead to it.
            rows = {
                "nodes_featureids": np.zeros(1),
                "nodes_splits": np.zeros(1),
                "nodes_missing_value_tracks_true": np.zeros(1),
                "nodes_truenodeids": place[:1],
                "nodes_trueleafs": np.ones(1),
                "nodes_falsenodeids": place[:1],
                "nodes_falseleafs": np.ones(1),
            }
        rows["leaf_weights"] = weights
        rows["leaf_targetids"] = np.full(int(leaf.sum()), target)
        for name, values in rows.items():
            self._columns.setdefault(name, []).append(values)
        self._roots.append(self._nodes)
        self._nodes += max(len(inner), 1)
        self._leaves += int(leaf.sum())

    def emit(self, builder: GraphBuilder, matrix: str, mode: int) -> str:
        """Add the trees to a graph.

        Parameters
        ----------
        builder : GraphBuilder
        matrix : str
            Name of the double features, shape (N, feature).
        mode : int
            ``BRANCH_LEQ`` or ``BRANCH_LT``, the comparison at every node.

        Returns
        -------
        str
            Name of the double sums, shape (N, target).
        """
        columns = {name: np.concatenate(parts) for name, parts in self._columns.items()}
        # Splits that send every finite value left carry an infinite threshold.
        largest = np.finfo(np.float64).max
        splits = np.clip(columns.pop("nodes_splits").astype(np.float64), -largest, largest)
        weights = columns.pop("leaf_weights").astype(np.float64)
        indices = {name: values.astype(np.int64).tolist() for name, values in columns.items()}
        return builder.node(
            "TreeEnsemble",
            [matrix],
            domain=ML_DOMAIN,
            n_targets=self.targets,
            aggregate_function=SUM,
            post_transform=NO_TRANSFORM,
            tree_roots=self._roots,
            nodes_splits=tensors.from_array(splits),
            nodes_modes=tensors.from_array(np.full(self._nodes, mode, dtype=np.uint8)),
            leaf_weights=tensors.from_array(weights),
            **indices,
        )


def search_tree(knots: FloatArray, feature: int) -> BinaryTree:
    """Return the balanced tree whose leaves are the intervals between knots.

    Parameters
    ----------
    knots : ndarray, shape (knot,), increasing
    feature : int
        Feature that is looked up.

    Returns
    -------
    BinaryTree
        Compared with "less than"; its leaves, in node order, are the intervals from
        below the first knot to above the last.
    """
    rows: list[list[float]] = []

    def build(first: int, last: int) -> int:
        place = len(rows)
        rows.append([-1, -1, 0.0])
        if first < last:
            middle = (first + last - 1) // 2
            left = build(first, middle)
            right = build(middle + 1, last)
            rows[place] = [left, right, float(knots[middle])]
        return place

    build(0, len(knots))
    table = np.array(rows)
    return BinaryTree(
        left=table[:, 0].astype(np.int64),
        right=table[:, 1].astype(np.int64),
        feature=np.full(len(rows), feature),
        threshold=table[:, 2],
        missing_left=np.zeros(len(rows), dtype=np.bool_),
    )
