"""A whole closure as one double-precision graph."""

from __future__ import annotations

from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from onnx import ModelProto, checker, shape_inference

from learnclosure import __version__
from learnclosure.closures.pointwise import flagged
from learnclosure.export.builder import GraphBuilder
from learnclosure.export.emitters import emit_regressor
from learnclosure.export.trace import Traced, TracingNamespace
from learnclosure.quantities import INPUTS, OUTPUTS, Quantity

if TYPE_CHECKING:
    from learnclosure.closures.closure import Closure

TENSOR_CONVENTION = "J = -K grad C; rows of K are flux components, columns gradient components"


def _note(quantity: Quantity) -> str:
    return f"{quantity.long_name} [{quantity.units}]"


def build_graph(
    closure: Closure, metadata: Mapping[str, str] | None = None, *, single: bool = False
) -> ModelProto:
    """Write a fitted closure as an ONNX graph.

    The closure's own ``prepare`` and ``finish`` are traced, so the graph holds the same
    arithmetic in the same order; only the regressor is written by an emitter of its own.
    Where an input is not finite the outputs are those of ``pointwise.flagged``.

    Parameters
    ----------
    closure : Closure
        Fitted.
    metadata : mapping of str to str, optional
        Further properties of the model, such as the version of the bundle.
    single : bool, optional
        Whether the products of linear maps and networks are taken in single precision.
        Features, trees, constraints, trust and half-widths stay in double, and so do inputs
        and outputs.

    Returns
    -------
    onnx.ModelProto
        Inputs are the closure's ``inputs_``, outputs the names of
        ``quantities.OUTPUTS``; every one is double, of shape (N, 1), in SI units on
        model axes. The model passes the full checker and strict shape inference.

    Raises
    ------
    BundleError
        If no emitter knows the closure's regressor.
    """
    builder = GraphBuilder(single=single)
    xp = TracingNamespace(builder)
    inputs = {
        name: Traced(builder, builder.input(name, _note(INPUTS[name]))) for name in closure.inputs_
    }

    def column(value: Any) -> Traced:
        """Spread what is the same at every point over the points."""
        return value if isinstance(value, Traced) else inputs[closure.inputs_[0]] * 0.0 + value

    prepared = closure.prepare(xp, inputs)
    features = [column(prepared.features[name]).name for name in closure.feature_names_]
    matrix = builder.node("Concat", features, axis=1)
    raw = builder.nodes(
        "Split", [emit_regressor(builder, closure.regressor_, matrix)], 4, axis=1, num_outputs=4
    )
    made = closure.finish(xp, [Traced(builder, name) for name in raw], prepared, inputs)
    outputs = flagged(xp, list(inputs.values()), made, closure.settings.floor)
    values = (*outputs.tensor, *outputs.half_width, outputs.trust)
    for quantity, value in zip(OUTPUTS.values(), values, strict=True):
        builder.output(quantity.name, column(value).name, _note(quantity))
    model = builder.model(
        closure.family.replace("-", "_"),
        f"eddy transport tensor of the family {closure.family}; {TENSOR_CONVENTION}",
        _metadata(closure, metadata or {}),
    )
    model.producer_name = "learnclosure"
    model.producer_version = __version__
    checker.check_model(model, full_check=True)
    shape_inference.infer_shapes(model, check_type=True, strict_mode=True)
    return model


def _metadata(closure: Closure, further: Mapping[str, str]) -> dict[str, str]:
    rows = [*(INPUTS[name] for name in closure.inputs_), *OUTPUTS.values()]
    return {
        "family": closure.family,
        "regressor": closure.regressor,
        "target": closure.target,
        "tensor_convention": TENSOR_CONVENTION,
        **{f"units.{row.name}": row.units for row in rows},
        **further,
    }
