"""Compiled columns: from levels to layers between surfaces of equal quantity.

Water is assigned by value: the part of a cell in which the quantity lies between two edges
belongs to the layer between them, wherever in the column it is, so that columns with
inversions need no sorting and conserve all the same. Within a cell the quantity is either
constant, or linear from face to centre to face with face values interpolated between
centres; what is carried along is constant within each cell. Every cell hands out exactly
its own thickness.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Any, ParamSpec, TypeVar, cast

import numba
import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]
P = ParamSpec("P")
R = TypeVar("R")

OPTIONS: dict[str, Any] = {"error_model": "numpy", "nogil": True}


def compiled(function: Callable[P, R]) -> Callable[P, R]:
    """Compile a kernel, keeping the machine code on disk wherever a cache can be written."""
    try:
        return cast("Callable[P, R]", numba.njit(cache=True, **OPTIONS)(function))
    except RuntimeError:
        # Raised where neither the package nor the user's cache folder can be written to.
        return cast("Callable[P, R]", numba.njit(**OPTIONS)(function))


def part_of_kernel(function: Callable[P, R]) -> Callable[P, R]:
    """Let kernels take a function in as if it were written out in them."""
    return cast("Callable[P, R]", numba.njit(inline="always", **OPTIONS)(function))


@part_of_kernel
def _layer_of(value: float, edges: FloatArray, guess: int) -> int:
    """Count the edges at or below a value, searching from a guess."""
    layer = guess
    while layer < len(edges) and edges[layer] <= value:
        layer += 1
    while layer > 0 and edges[layer - 1] > value:
        layer -= 1
    return layer


@part_of_kernel
def _between(upper: float, upper_thickness: float, lower: float, lower_thickness: float) -> float:
    """Interpolate linearly from the centres of two cells to the face between them."""
    share = upper_thickness / (upper_thickness + lower_thickness)
    return upper + share * (lower - upper)


@part_of_kernel
def _hand_out(
    low: float,
    high: float,
    thickness: float,
    first: int,
    last: int,
    edges: FloatArray,
    values: FloatArray,
    inside: FloatArray,
) -> None:
    """Share half a cell, in which the quantity goes from low to high, among its layers."""
    rest, start = thickness, low
    for layer in range(first, last + 1):
        part = rest
        if layer < last:
            part = thickness * ((edges[layer] - start) / (high - low))
            start = edges[layer]
            rest -= part
        for field in range(len(values)):
            inside[layer, field] += part * values[field]
        inside[layer, len(values)] += part


@compiled
def remap_columns(
    fields: FloatArray,
    quantity: FloatArray,
    thickness: FloatArray,
    edges: FloatArray,
    linear: bool,
    content: FloatArray,
    layer_thickness: FloatArray,
) -> None:
    """Sum thickness and content of all cells over the layers they belong to.

    Parameters
    ----------
    fields : ndarray, shape (field, level, y, x)
        What is carried along.
    quantity : ndarray, shape (level, y, x)
        Growing downward, if not everywhere.
    thickness : ndarray, shape (level, y, x), m
        Zero on land.
    edges : ndarray, shape (layer - 1,)
        Growing values of the quantity at the interfaces.
    linear : bool
        Whether the quantity is linear between centres or constant in each cell.
    content : ndarray, shape (field, layer, y, x)
        Filled: integrals over depth of each field.
    layer_thickness : ndarray, shape (layer, y, x), m
        Filled.
    """
    levels, rows, columns = quantity.shape
    count = len(fields)
    # One row at a time with the fields of a cell side by side, for the sake of the cache.
    row = np.empty((columns, levels, count))
    inside = np.empty((len(edges) + 1, count + 1))
    for j in range(rows):
        for field in range(count):
            for k in range(levels):
                for i in range(columns):
                    row[i, k, field] = fields[field, k, j, i]
        for i in range(columns):
            inside[:] = 0.0
            last = 0
            for k in range(levels):
                own = thickness[k, j, i]
                if own <= 0.0:
                    continue
                here = quantity[k, j, i]
                upper, lower = here, here
                if linear and k > 0 and thickness[k - 1, j, i] > 0.0:
                    upper = _between(quantity[k - 1, j, i], thickness[k - 1, j, i], here, own)
                if linear and k < levels - 1 and thickness[k + 1, j, i] > 0.0:
                    lower = _between(here, own, quantity[k + 1, j, i], thickness[k + 1, j, i])
                for half in range(2):
                    other = upper if half == 0 else lower
                    low, high = min(here, other), max(here, other)
                    first = _layer_of(low, edges, last)
                    last = _layer_of(high, edges, first)
                    _hand_out(low, high, 0.5 * own, first, last, edges, row[i, k], inside)
            for layer in range(len(edges) + 1):
                for field in range(count):
                    content[field, layer, j, i] = inside[layer, field]
                layer_thickness[layer, j, i] = inside[layer, count]


def to_layers(
    fields: FloatArray,
    quantity: FloatArray,
    thickness: FloatArray,
    edges: FloatArray,
    *,
    linear: bool = True,
) -> tuple[FloatArray, FloatArray]:
    """Remap fields on levels to layers, conserving their integrals over depth.

    Parameters
    ----------
    fields : ndarray, shape (field, level, y, x)
    quantity : ndarray, shape (level, y, x)
        Growing downward, if not everywhere.
    thickness : ndarray, shape (level, y, x), m
        Zero on land.
    edges : ndarray, shape (layer - 1,)
        Growing.
    linear : bool, optional
        Whether the quantity is linear between centres or constant in each cell.

    Returns
    -------
    means : ndarray, shape (field, layer, y, x)
        Averages over each layer; zero where it is not there.
    layer_thickness : ndarray, shape (layer, y, x), m

    Examples
    --------
    >>> import numpy as np
    >>> levels = np.array([1.0, 3.0])[:, None, None]
    >>> mean, thickness = to_layers(
    ...     levels[None], levels, np.full_like(levels, 10.0), np.array([2.0]), linear=False
    ... )
    >>> thickness.ravel(), mean.ravel()
    (array([10., 10.]), array([1., 3.]))
    """
    layers = len(edges) + 1
    content = np.empty((len(fields), layers, *quantity.shape[1:]))
    found = np.empty((layers, *quantity.shape[1:]))
    remap_columns(fields, quantity, thickness, edges, linear, content, found)
    content /= np.where(found > 0.0, found, 1.0)
    return content, found


def inverted_columns(quantity: FloatArray, thickness: FloatArray) -> BoolArray:
    """Tell in which columns the quantity falls with depth somewhere.

    Parameters
    ----------
    quantity : ndarray, shape (..., level, y, x)
        Growing downward, if not everywhere.
    thickness : ndarray, shape (..., level, y, x), m

    Returns
    -------
    ndarray of bool, shape (..., y, x)
    """
    wet = thickness > 0.0
    falls = quantity[..., 1:, :, :] < quantity[..., :-1, :, :]
    return np.asarray((falls & wet[..., 1:, :, :] & wet[..., :-1, :, :]).any(axis=-3))
