"""An array namespace whose arithmetic becomes a graph instead of numbers.

Elementwise code written as ``function(xp, ...)`` runs with NumPy and, unchanged, with
``TracingNamespace``: every operation then adds one node of the same meaning to a
``GraphBuilder``. A division stays a division and the order of operations is kept, so
that the graph repeats the arithmetic of NumPy to the last bit wherever the operators
themselves are correctly rounded.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, ClassVar, NoReturn

import numpy as np

from learnclosure.export.builder import GraphBuilder

Operand = Any
"""A traced value or a plain number."""


class Traced:
    """A column of values in the graph.

    Parameters
    ----------
    builder : GraphBuilder
    name : str
        Name of the value.
    """

    __slots__ = ("builder", "name")
    # Keeps NumPy numbers on the left of an operator from swallowing the value.
    __array_ufunc__ = None
    __hash__: ClassVar[None]  # type: ignore[assignment]

    def __init__(self, builder: GraphBuilder, name: str) -> None:
        self.builder = builder
        self.name = name

    def _apply(self, operator: str, *operands: Operand) -> Traced:
        return apply(self.builder, operator, *operands)

    def __add__(self, other: Operand) -> Traced:
        return self._apply("Add", self, other)

    def __radd__(self, other: Operand) -> Traced:
        return self._apply("Add", other, self)

    def __sub__(self, other: Operand) -> Traced:
        return self._apply("Sub", self, other)

    def __rsub__(self, other: Operand) -> Traced:
        return self._apply("Sub", other, self)

    def __mul__(self, other: Operand) -> Traced:
        return self._apply("Mul", self, other)

    def __rmul__(self, other: Operand) -> Traced:
        return self._apply("Mul", other, self)

    def __truediv__(self, other: Operand) -> Traced:
        return self._apply("Div", self, other)

    def __rtruediv__(self, other: Operand) -> Traced:
        return self._apply("Div", other, self)

    def __neg__(self) -> Traced:
        return self._apply("Neg", self)

    def __lt__(self, other: Operand) -> Traced:
        return self._apply("Less", self, other)

    def __le__(self, other: Operand) -> Traced:
        return self._apply("LessOrEqual", self, other)

    def __gt__(self, other: Operand) -> Traced:
        return self._apply("Greater", self, other)

    def __ge__(self, other: Operand) -> Traced:
        return self._apply("GreaterOrEqual", self, other)

    def __bool__(self) -> NoReturn:
        raise TypeError("a traced value is neither true nor false; choose with xp.where")

    def __eq__(self, other: object) -> NoReturn:
        raise TypeError("traced values cannot be tested for equality; compare with < or >")

    def __ne__(self, other: object) -> NoReturn:
        raise TypeError("traced values cannot be tested for equality; compare with < or >")


def apply(builder: GraphBuilder, operator: str, *operands: Operand) -> Traced:
    """Add one operator applied to traced values and plain numbers.

    Parameters
    ----------
    builder : GraphBuilder
    operator : str
        Name of the operator.
    *operands : Traced or float

    Returns
    -------
    Traced
    """
    names = [
        operand.name if isinstance(operand, Traced) else builder.constant(float(operand))
        for operand in operands
    ]
    return Traced(builder, builder.node(operator, names))


class TracingNamespace:
    """The functions elementwise code may call, beside arithmetic and comparisons.

    Parameters
    ----------
    builder : GraphBuilder
        Graph the nodes are added to. Calls on plain numbers alone are computed at once.
    """

    def __init__(self, builder: GraphBuilder) -> None:
        self._builder = builder

    def _call(self, operator: str, numpy_name: str, operands: Sequence[Operand]) -> Any:
        if any(isinstance(operand, Traced) for operand in operands):
            return apply(self._builder, operator, *operands)
        return getattr(np, numpy_name)(*operands)

    def sqrt(self, value: Operand) -> Any:
        """Square root, elementwise."""
        return self._call("Sqrt", "sqrt", [value])

    def abs(self, value: Operand) -> Any:
        """Absolute value, elementwise."""
        return self._call("Abs", "abs", [value])

    def exp(self, value: Operand) -> Any:
        """Exponential, elementwise."""
        return self._call("Exp", "exp", [value])

    def log(self, value: Operand) -> Any:
        """Natural logarithm, elementwise."""
        return self._call("Log", "log", [value])

    def sign(self, value: Operand) -> Any:
        """Sign: -1, 0 or 1, elementwise."""
        return self._call("Sign", "sign", [value])

    def maximum(self, first: Operand, second: Operand) -> Any:
        """Larger of two values, elementwise."""
        return self._call("Max", "maximum", [first, second])

    def minimum(self, first: Operand, second: Operand) -> Any:
        """Smaller of two values, elementwise."""
        return self._call("Min", "minimum", [first, second])

    def where(self, condition: Operand, chosen: Operand, otherwise: Operand) -> Any:
        """First value where a comparison holds, the second elsewhere.

        Parameters
        ----------
        condition : Traced or bool
            Result of a comparison.
        chosen, otherwise : Traced or float

        Returns
        -------
        Traced or float
        """
        if not isinstance(condition, Traced):
            return chosen if condition else otherwise
        return apply(self._builder, "Where", condition, chosen, otherwise)
