"""The nearest marked cell of every cell, on grids of any spacing."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]
IndexArray = npt.NDArray[np.int64]

NEIGHBOURS = [(-1, -1), (-1, 0), (-1, 1), (0, -1), (0, 1), (1, -1), (1, 0), (1, 1)]


EQUAL = 1e-9
"""Relative difference of squared distances that are the same but for rounding."""


class Nearest(NamedTuple):
    """The nearest marked cell of every cell, as fields on (y, x).

    Attributes
    ----------
    row, column : ndarray of int
        Its place; -1 where there is none at all.
    along_x, along_y : ndarray, m
        Way from it to the cell; infinite where there is none at all.
    """

    row: IndexArray
    column: IndexArray
    along_x: FloatArray
    along_y: FloatArray


class Positions:
    """Ways between cells, the short way round periodic axes.

    Parameters
    ----------
    geometry : Geometry
    """

    def __init__(self, geometry: Geometry) -> None:
        self.geometry = geometry
        self.x = np.cumsum(geometry.dx, axis=1) - 0.5 * geometry.dx
        self.y = np.cumsum(geometry.dy, axis=0) - 0.5 * geometry.dy
        self.length_x = geometry.dx.sum(axis=1)
        self.length_y = geometry.dy.sum(axis=0)

    def way(
        self, row: IndexArray, column: IndexArray, to_row: IndexArray, to_column: IndexArray
    ) -> tuple[FloatArray, FloatArray]:
        """Way from cells to other cells.

        The distance along an axis is the mean of those measured in the row or column of
        either cell, which is exact where widths do not change across it.

        Parameters
        ----------
        row, column, to_row, to_column : ndarray of int

        Returns
        -------
        along_x, along_y : ndarray, m
        """

        def distance(of: FloatArray, length: FloatArray, periodic: bool) -> FloatArray:
            return of - length * np.round(of / length) if periodic else of

        along_x = 0.5 * (
            self.x[row, to_column]
            - self.x[row, column]
            + self.x[to_row, to_column]
            - self.x[to_row, column]
        )
        along_y = 0.5 * (
            self.y[to_row, column]
            - self.y[row, column]
            + self.y[to_row, to_column]
            - self.y[row, to_column]
        )
        length_x = 0.5 * (self.length_x[row] + self.length_x[to_row])
        length_y = 0.5 * (self.length_y[column] + self.length_y[to_column])
        return (
            distance(along_x, length_x, self.geometry.periodic_x),
            distance(along_y, length_y, self.geometry.periodic_y),
        )


def nearest_marked(
    marked: BoolArray, geometry: Geometry, preference: FloatArray | None = None
) -> Nearest:
    """Find the nearest marked cell of every cell.

    Candidates spread over the grid in jumps of halving length, and in single steps at the
    end, so that the cost grows with the number of cells and the logarithm of the grid's
    side alone.

    Parameters
    ----------
    marked : ndarray of bool, shape (y, x)
    geometry : Geometry
        Land does not stand in the way.
    preference : ndarray, shape (y, x), optional
        Of marked cells at equal distance the one with the largest is taken.

    Returns
    -------
    Nearest

    Notes
    -----
    Jump flooding, Rong and Tan 2006, Proc. Symp. Interactive 3D Graphics and Games,
    109-116 (from memory); rarely off by the difference of two almost equal distances.
    """
    positions = Positions(geometry)
    rows, columns = marked.shape
    here_row, here_column = (np.asarray(part, np.int64) for part in np.indices(marked.shape))
    row = np.where(marked, here_row, -1)
    column = np.where(marked, here_column, -1)
    along_x = np.where(marked, 0.0, np.inf)
    along_y = along_x.copy()
    rank = np.zeros(marked.shape) if preference is None else preference
    jumps = [1 << power for power in reversed(range(max(rows, columns).bit_length()))]
    for jump in (*jumps, 1, 1):
        for down, right in NEIGHBOURS:
            from_row, from_column = here_row + down * jump, here_column + right * jump
            inside = np.ones_like(marked)
            if not geometry.periodic_y:
                inside &= (from_row >= 0) & (from_row < rows)
            if not geometry.periodic_x:
                inside &= (from_column >= 0) & (from_column < columns)
            place = from_row % rows, from_column % columns
            its_row, its_column = row[place], column[place]
            inside &= its_row >= 0
            x, y = positions.way(its_row, its_column, here_row, here_column)
            square, known = x * x + y * y, along_x**2 + along_y**2
            equal = (square >= known * (1.0 - EQUAL)) & (square <= known * (1.0 + EQUAL))
            preferred = equal & (rank[its_row, its_column] > rank[row, column])
            better = inside & (((square < known) & ~equal) | preferred)
            row, column = np.where(better, its_row, row), np.where(better, its_column, column)
            along_x, along_y = np.where(better, x, along_x), np.where(better, y, along_y)
    return Nearest(row, column, along_x, along_y)
