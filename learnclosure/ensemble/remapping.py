"""Compiled columns: from levels to layers between surfaces of equal quantity.

Water is assigned by value: the part of a cell in which the quantity lies between two edges
belongs to the layer between them, wherever in the column it is, so that columns with
inversions need no sorting and conserve all the same. Within a cell everything is either
constant or linear: the quantity from face to centre to face, with face values interpolated
between centres; what is carried along about its mean, with the smaller of its two changes
from centre to face on both sides (van Leer 1979, J. Comput. Phys. 32, 101-136, from
memory), so that nothing exceeds its neighbours. Every cell hands out exactly its own
thickness and content.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.compiled import compiled, part_of_kernel

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]


@part_of_kernel()
def _layer_of(value: float, edges: FloatArray, guess: int) -> int:
    """Count the edges at or below a value, searching from a guess."""
    layer = guess
    while layer < len(edges) and edges[layer] <= value:
        layer += 1
    while layer > 0 and edges[layer - 1] > value:
        layer -= 1
    return layer


@part_of_kernel()
def _hand_out(
    low: float,
    high: float,
    thickness: float,
    first: int,
    last: int,
    edges: FloatArray,
    values: FloatArray,
    change: FloatArray,
    start: float,
    reach: float,
    inside: FloatArray,
) -> None:
    """Share half a cell, in which the quantity goes from low to high, among its layers.

    The half begins, where the quantity is low, at ``start`` and reaches ``reach`` further,
    in parts of the cell below its centre.
    """
    done, here = 0.0, low
    for layer in range(first, last + 1):
        share = max(1.0 - done, 0.0)
        if layer < last:
            share = (edges[layer] - here) / (high - low)
            here = edges[layer]
        middle = start + reach * (done + 0.5 * share)
        done += share
        part = thickness * share
        for field in range(len(values)):
            inside[layer, field] += part * (values[field] + middle * change[field])
        inside[layer, len(values)] += part


@part_of_kernel()
def _lesser(one: float, other: float) -> float:
    """Return what is nearer to zero of two numbers of one sign, else zero."""
    if one * other <= 0.0:
        return 0.0
    return one if abs(one) < abs(other) else other


@part_of_kernel()
def _set_changes(
    column: FloatArray, k: int, own: float, above: float, below: float, change: FloatArray
) -> None:
    """Set by how much each field changes from the upper to the lower face of a cell."""
    if above > 0.0 and below > 0.0:
        for field in range(len(change)):
            value = column[k, field]
            change[field] = 2.0 * _lesser(
                own / (own + above) * (value - column[k - 1, field]),
                own / (own + below) * (column[k + 1, field] - value),
            )
    else:
        change[:] = 0.0


@compiled()
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
        Whether profiles are linear or constant within cells.
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
    change = np.zeros(count)
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
                above = thickness[k - 1, j, i] if linear and k > 0 else 0.0
                below = thickness[k + 1, j, i] if linear and k < levels - 1 else 0.0
                if above > 0.0:
                    upper = here + own / (own + above) * (quantity[k - 1, j, i] - here)
                if below > 0.0:
                    lower = here + own / (own + below) * (quantity[k + 1, j, i] - here)
                _set_changes(row[i], k, own, above, below, change)
                for half in range(2):
                    other = upper if half == 0 else lower
                    low, high = min(here, other), max(here, other)
                    face = half - 0.5
                    start = face if other < here else 0.0
                    reach = -face if other < here else face
                    first = _layer_of(low, edges, last)
                    last = _layer_of(high, edges, first)
                    if last > first and edges[last - 1] == high and low < high:
                        # The half ends at the edge: no water lies beyond it.
                        last -= 1
                    _hand_out(
                        low,
                        high,
                        0.5 * own,
                        first,
                        last,
                        edges,
                        row[i, k],
                        change,
                        start,
                        reach,
                        inside,
                    )
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
        Whether profiles are linear or constant within cells.

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
