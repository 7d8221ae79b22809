"""What an exported graph may consist of; the builder writes it, the gate insists on it."""

from __future__ import annotations

IR_VERSION = 10
OPSET = 21
ML_DOMAIN = "ai.onnx.ml"
ML_OPSET = 5
BATCH = "N"
"""Name of the one dimension that is free: the number of points."""

_PLAIN = (
    "Abs", "Add", "Div", "Exp", "Greater", "GreaterOrEqual", "Identity", "Less", "LessOrEqual",
    "Log", "MatMul", "Max", "Min", "Mul", "Neg", "Relu", "Sign", "Sqrt", "Sub", "Tanh", "Where",
)  # fmt: skip

TREE_INDEX_ATTRIBUTES = (
    "leaf_targetids",
    "nodes_falseleafs",
    "nodes_falsenodeids",
    "nodes_featureids",
    "nodes_missing_value_tracks_true",
    "nodes_trueleafs",
    "nodes_truenodeids",
    "tree_roots",
)

OPERATORS: dict[tuple[str, str], tuple[str, ...]] = {
    **{("", name): () for name in _PLAIN},
    ("", "Cast"): ("to",),
    ("", "Concat"): ("axis",),
    ("", "Gather"): ("axis",),
    ("", "ReduceSum"): ("keepdims",),
    ("", "Split"): ("axis", "num_outputs"),
    (ML_DOMAIN, "TreeEnsemble"): (
        *TREE_INDEX_ATTRIBUTES,
        "aggregate_function",
        "leaf_weights",
        "n_targets",
        "nodes_modes",
        "nodes_splits",
        "post_transform",
    ),
}
"""Operators by domain and name, each with the attributes it may carry. None of them runs
another graph, reads a file or makes an array whose size its inputs' shapes do not tell."""

BRANCH_LEQ, BRANCH_LT = 0, 1
SUM = 1
NO_TRANSFORM = 0
