"""Regressors as graph nodes, one emitter for each kind, all in double precision.

Piecewise-linear functions and forests rest on tree lookups that return the number of a
leaf: the number then picks rows of a table. This keeps them small, quick and exact: no
value passes through single precision except where the regressor itself compares
single-precision features.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import numpy.typing as npt
from onnx import TensorProto

from learnclosure.errors import BundleError
from learnclosure.export.builder import GraphBuilder
from learnclosure.export.operators import BRANCH_LEQ, BRANCH_LT
from learnclosure.export.trees import BinaryTree, TreeTable, search_tree

FloatArray = npt.NDArray[np.float64]
ACTIVATIONS = {"tanh": "Tanh", "relu": "Relu"}


def emit_regressor(builder: GraphBuilder, regressor: Any, matrix: str) -> str:
    """Add a fitted regressor to a graph.

    Parameters
    ----------
    builder : GraphBuilder
    regressor : estimator
        One of ``closures.regressors``, told apart by its ``kind``.
    matrix : str
        Name of the double features, shape (N, feature).

    Returns
    -------
    str
        Name of the double outputs, shape (N, output).

    Raises
    ------
    BundleError
        If there is no emitter for this kind of regressor.
    """
    kind = getattr(regressor, "kind", type(regressor).__name__)
    if kind not in EMITTERS:
        raise BundleError(
            "no emitter writes this kind of regressor into a graph",
            where="export",
            found=kind,
            expected=", ".join(EMITTERS),
            remedy="train with one of the regressors the study file lists",
        )
    return EMITTERS[kind](builder, regressor, matrix)


def emit_scores(builder: GraphBuilder, transformer: Any, matrix: str) -> str:
    """Add a ``ClippedQuantileNormal``: piecewise-linear functions, constant at both ends.

    Parameters
    ----------
    builder : GraphBuilder
    transformer : ClippedQuantileNormal
        Fitted.
    matrix : str
        Name of the double features, shape (N, feature).

    Returns
    -------
    str
        Name of the scores, shape (N, feature); the arithmetic is that of
        ``numpy.interp``.
    """
    table = TreeTable(targets=len(transformer.knots_))
    parts: dict[str, list[FloatArray]] = {"start": [], "score": [], "slope": []}
    for feature, (knots, values) in enumerate(
        zip(transformer.knots_, transformer.values_, strict=True)
    ):
        numbers = table.leaves + np.arange(len(knots) + 1, dtype=np.float64)
        table.add(search_tree(knots, feature), feature, numbers)
        parts["start"] += [knots[:1], knots]
        parts["score"] += [values[:1], values]
        parts["slope"] += [np.zeros(1), np.diff(values) / np.diff(knots), np.zeros(1)]
    place = builder.node("Cast", [table.emit(builder, matrix, BRANCH_LT)], to=TensorProto.INT64)
    picked = {
        name: builder.node("Gather", [builder.constant(np.concatenate(columns)), place], axis=0)
        for name, columns in parts.items()
    }
    distance = builder.node("Sub", [matrix, picked["start"]])
    return builder.node("Add", [builder.node("Mul", [picked["slope"], distance]), picked["score"]])


def _affine(builder: GraphBuilder, values: str, weights: FloatArray, biases: FloatArray) -> str:
    kind = np.float32 if builder.single else np.float64
    product = builder.node("MatMul", [values, builder.constant(weights.astype(kind))])
    return builder.node("Add", [product, builder.constant(biases.astype(kind))])


def _narrow(builder: GraphBuilder, values: str) -> str:
    """Go over to the precision products are taken in."""
    return builder.node("Cast", [values], to=TensorProto.FLOAT) if builder.single else values


def _widen(builder: GraphBuilder, values: str) -> str:
    """Come back to double precision."""
    return builder.node("Cast", [values], to=TensorProto.DOUBLE) if builder.single else values


def _emit_ridge(builder: GraphBuilder, regressor: Any, matrix: str) -> str:
    scores = _narrow(builder, emit_scores(builder, regressor.transformer_, matrix))
    product = _affine(builder, scores, regressor.coefficients_.T, regressor.intercept_)
    return _widen(builder, product)


def _emit_perceptron(builder: GraphBuilder, regressor: Any, matrix: str) -> str:
    values = _narrow(builder, emit_scores(builder, regressor.transformer_, matrix))
    activation = ACTIVATIONS[regressor.activation_]
    *hidden, last = zip(regressor.weights_, regressor.biases_, strict=True)
    for weights, biases in hidden:
        values = builder.node(activation, [_affine(builder, values, weights, biases)])
    return _widen(builder, _affine(builder, values, *last))


def _emit_forest(builder: GraphBuilder, regressor: Any, matrix: str) -> str:
    estimators = regressor.forest_.estimators_
    table = TreeTable(targets=len(estimators))
    rows: list[FloatArray] = []
    for number, estimator in enumerate(estimators):
        raw = estimator.tree_
        tree = BinaryTree(
            left=np.asarray(raw.children_left, dtype=np.int64),
            right=np.asarray(raw.children_right, dtype=np.int64),
            feature=np.asarray(raw.feature, dtype=np.int64),
            threshold=np.asarray(raw.threshold, dtype=np.float64),
            missing_left=np.asarray(raw.missing_go_to_left, dtype=np.bool_),
        )
        values = np.asarray(raw.value[tree.is_leaf][:, :, 0], dtype=np.float64)
        table.add(tree, number, table.leaves + np.arange(len(values), dtype=np.float64))
        rows.append(values)
    # The trees were grown on, and compare, features rounded to single precision.
    single = builder.node("Cast", [matrix], to=TensorProto.FLOAT)
    rounded = builder.node("Cast", [single], to=TensorProto.DOUBLE)
    place = builder.node("Cast", [table.emit(builder, rounded, BRANCH_LEQ)], to=TensorProto.INT64)
    picked = builder.node("Gather", [builder.constant(np.concatenate(rows)), place], axis=0)
    total = builder.node("ReduceSum", [picked, builder.constant(np.array([1]))], keepdims=0)
    return builder.node("Div", [total, builder.constant(float(len(estimators)))])


def _emit_boosting(builder: GraphBuilder, regressor: Any, matrix: str) -> str:
    table = TreeTable(targets=len(regressor.boosters_))
    for target, booster in enumerate(regressor.boosters_):
        if booster.loss != "squared_error":
            raise BundleError(
                "only boosting of squared errors can be exported",
                where="export",
                found=booster.loss,
            )
        for (predictor,) in booster._predictors:
            nodes = predictor.nodes
            leaf = nodes["is_leaf"].astype(np.bool_)
            tree = BinaryTree(
                left=np.where(leaf, -1, nodes["left"].astype(np.int64)),
                right=np.where(leaf, -1, nodes["right"].astype(np.int64)),
                feature=nodes["feature_idx"].astype(np.int64),
                threshold=nodes["num_threshold"].astype(np.float64),
                missing_left=nodes["missing_go_to_left"].astype(np.bool_),
            )
            table.add(tree, target, nodes["value"][leaf].astype(np.float64))
    start = np.array([np.ravel(booster._baseline_prediction)[0] for booster in regressor.boosters_])
    total = table.emit(builder, matrix, BRANCH_LEQ)
    return builder.node("Add", [total, builder.constant(start)])


def _emit_mean(builder: GraphBuilder, regressor: Any, matrix: str) -> str:
    first, *others = (emit_regressor(builder, part, matrix) for part in regressor.parts_)
    total = first
    for other in others:
        total = builder.node("Add", [total, other])
    return builder.node("Div", [total, builder.constant(float(1 + len(others)))])


EMITTERS: dict[str, Callable[[GraphBuilder, Any, str], str]] = {
    "ridge": _emit_ridge,
    "forest": _emit_forest,
    "boosting": _emit_boosting,
    "mlp": _emit_perceptron,
    "mean": _emit_mean,
}
