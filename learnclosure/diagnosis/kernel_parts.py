"""What the compiled loops of the moments are made of: their plan, rows in memory, block sums."""

from __future__ import annotations

from typing import Any, NamedTuple

import numba
import numpy as np
import numpy.typing as npt
from numba import types
from numba.extending import intrinsic

from learnclosure.compiled import compiled

FloatArray = npt.NDArray[np.float64]
IndexArray = npt.NDArray[np.int64]


class Plan(NamedTuple):
    """What is to be summed, by number of field.

    Attributes
    ----------
    leads : ndarray of int
        Fields that stand first in a product.
    pair_lead, pair_field : ndarray of int
        Products: place in ``leads`` and field.
    sizes : ndarray of int
        Members of each group; member ``i`` is in group ``i % groups``.
    kept_fields, kept_pairs : int
        How many of the first fields and products are kept for each group.
    halves : bool
        Whether groups of even and of odd number are halves.
    left_out : bool
        Whether products without each group are wanted.
    weighting : int
        0 if a member counts one, 1 if its thickness, 2 if one where it has any.
    thickness : int
        Number of that field.
    factor : int
        Cells per coarse cell along x and y.
    """

    leads: IndexArray
    pair_lead: IndexArray
    pair_field: IndexArray
    sizes: IndexArray
    kept_fields: int
    kept_pairs: int
    halves: bool
    left_out: bool
    weighting: int
    thickness: int
    factor: int


class Rows(NamedTuple):
    """Where the fields of one time lie in memory.

    Attributes
    ----------
    planes : ndarray of int, shape (field, member, layer)
        Addresses of contiguous horizontal fields.
    single : ndarray of bool, shape (field,)
        Whether a field is in single precision.
    span : int
        Numbers in a row.
    """

    planes: IndexArray
    single: npt.NDArray[np.bool_]
    span: int


class Tile(NamedTuple):
    """Rows and columns of one layer looked at together."""

    layer: int
    row: int
    rows: int
    column: int
    columns: int


def _pointer_to(number: types.Type) -> Any:
    @intrinsic  # type: ignore[untyped-decorator]
    def pointer(_context: Any, address: Any) -> Any:
        def generate(context: Any, builder: Any, signature: Any, arguments: Any) -> Any:
            return builder.inttoptr(arguments[0], context.get_value_type(signature.return_type))

        return types.CPointer(number)(address), generate

    return pointer


_single = _pointer_to(types.float32)
_double = _pointer_to(types.float64)


@compiled()
def load(source, tile, target):  # type: ignore[no-untyped-def]
    """Copy a tile of all fields and members, shape (field, member, row, column)."""
    fields, members, rows, columns = target.shape
    for field in range(fields):
        size = 4 if source.single[field] else 8
        for member in range(members):
            for row in range(rows):
                offset = (tile.row + row) * source.span + tile.column
                address = source.planes[field, member, tile.layer] + size * offset
                if source.single[field]:
                    narrow = numba.carray(_single(address), columns)
                    for column in range(columns):
                        target[field, member, row, column] = narrow[column]
                else:
                    wide = numba.carray(_double(address), columns)
                    for column in range(columns):
                        target[field, member, row, column] = wide[column]


@compiled()
def fold(values, tile, factor, target):  # type: ignore[no-untyped-def]
    """Sum tiles, shape (any, point), over their blocks; ``values`` is used up on the way."""
    columns, whole = tile.columns, tile.columns // factor
    for number in range(len(target)):
        for row in range(1, tile.rows):
            start = np.uint64(row * columns)
            for column in range(np.uint64(columns)):
                values[number, column] += values[number, start + column]
        if factor == 2:
            for block in range(whole):
                target[number, block] = values[number, 2 * block] + values[number, 2 * block + 1]
        else:
            for block in range(whole):
                total = values[number, block * factor]
                for column in range(block * factor + 1, (block + 1) * factor):
                    total += values[number, column]
                target[number, block] = total
        if whole * factor < columns:
            total = values[number, whole * factor]
            for column in range(whole * factor + 1, columns):
                total += values[number, column]
            target[number, whole] = total


@compiled()
def scale(values, area, target):  # type: ignore[no-untyped-def]
    """Multiply by area; what stands on land does not matter."""
    for number in range(len(target)):
        for point in range(len(area)):
            value = area[point] * values[number, point]
            target[number, point] = value if area[point] > 0.0 else 0.0


@compiled()
def multiply(plan, area, apart, target):  # type: ignore[no-untyped-def]
    """Products of two fields each, times area."""
    for pair in range(len(target)):
        first, second = plan.leads[plan.pair_lead[pair]], plan.pair_field[pair]
        for point in range(len(area)):
            target[pair, point] = area[point] * apart[first, point] * apart[second, point]
