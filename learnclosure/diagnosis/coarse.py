"""Block averages of masked fields onto a coarser grid, weighted by area."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry, Grid

FloatArray = npt.NDArray[np.float64]


def _block_sum(values: npt.NDArray[Any], factor: int) -> npt.NDArray[Any]:
    """Sum blocks of ``factor`` cells along the last two axes; the last block may be smaller."""
    rows, columns = values.shape[-2:]
    if rows % factor == 0 and columns % factor == 0:
        # Adding slices is several times faster than summing over short axes.
        bands = sum(values[..., start::factor, :] for start in range(1, factor))
        bands = values[..., ::factor, :] + bands
        rest = sum(bands[..., start::factor] for start in range(1, factor))
        return np.asarray(bands[..., ::factor] + rest)
    along_x = np.add.reduceat(values, np.arange(0, columns, factor), axis=-1)
    return np.asarray(np.add.reduceat(along_x, np.arange(0, rows, factor), axis=-2))


@dataclass(frozen=True)
class Coarsening:
    """Box averages from a grid to one that is ``factor`` times coarser.

    Where the number of cells is not a multiple of the factor, the last block of an axis
    holds the cells that are left and is narrower.

    Attributes
    ----------
    grid : Grid
        The fine grid.
    factor : int
        Cells per coarse cell along x and y.
    """

    grid: Grid
    factor: int

    @cached_property
    def _weight(self) -> FloatArray:
        geometry = self.grid.geometry
        return np.asarray(np.where(geometry.mask, geometry.area, 0.0))

    @cached_property
    def _total(self) -> FloatArray:
        return _block_sum(self._weight, self.factor)

    @cached_property
    def wet_share(self) -> FloatArray:
        """Share of each coarse cell's area that is sea, shape (layer, y, x)."""
        return np.asarray(self._total / _block_sum(self.grid.geometry.area, self.factor))

    def mean(self, field: FloatArray) -> FloatArray:
        """Average over the sea of each block.

        Parameters
        ----------
        field : ndarray, shape (..., layer, y, x)

        Returns
        -------
        ndarray, shape (..., layer, coarse y, coarse x)
            Zero where a block has no sea.
        """
        total = _block_sum(np.where(self._weight > 0.0, field * self._weight, 0.0), self.factor)
        return np.asarray(total / np.where(self._total > 0.0, self._total, 1.0))

    @property
    def sea_area(self) -> FloatArray:
        """Sea area of each coarse cell, shape (layer, y, x), m2."""
        return self._total

    def spread(self, coarse: FloatArray) -> FloatArray:
        """Give every cell the value of its block.

        Parameters
        ----------
        coarse : ndarray, shape (..., coarse y, coarse x)

        Returns
        -------
        ndarray, shape (..., y, x)
        """
        rows, columns = self.grid.shape[1:]
        wide = coarse.repeat(self.factor, axis=-1)[..., :columns]
        return np.asarray(wide.repeat(self.factor, axis=-2)[..., :rows, :])

    def surface_mean(self, field: FloatArray) -> FloatArray:
        """Average a field that does not depend on the layer over all of each block.

        Parameters
        ----------
        field : ndarray, shape (..., y, x)

        Returns
        -------
        ndarray, shape (..., coarse y, coarse x)
        """
        area = self.grid.geometry.area
        return np.asarray(_block_sum(field * area, self.factor) / _block_sum(area, self.factor))

    @cached_property
    def geometry(self) -> Geometry:
        """Cell widths, mask and periodic axes of the coarse grid."""
        fine = self.grid.geometry
        starts_x = np.arange(0, fine.dx.shape[1], self.factor)
        starts_y = np.arange(0, fine.dx.shape[0], self.factor)
        per_row = np.minimum(self.factor, fine.dx.shape[0] - starts_y)[:, None]
        per_column = np.minimum(self.factor, fine.dx.shape[1] - starts_x)[None, :]
        return Geometry(
            dx=_block_sum(fine.dx, self.factor) / per_row,
            dy=_block_sum(fine.dy, self.factor) / per_column,
            mask=self._total > 0.0,
            periodic_x=fine.periodic_x,
            periodic_y=fine.periodic_y,
        )

    @cached_property
    def x(self) -> FloatArray:
        """Centres of the coarse cells along x, m."""
        return _axis_mean(self.grid.x, self.factor)

    @cached_property
    def y(self) -> FloatArray:
        """Centres of the coarse cells along y, m."""
        return _axis_mean(self.grid.y, self.factor)


def _axis_mean(values: FloatArray, factor: int) -> FloatArray:
    starts = np.arange(0, len(values), factor)
    count = np.minimum(factor, len(values) - starts)
    return np.asarray(np.add.reduceat(values, starts) / count)
