"""Smooth fields told by fewer numbers than cells: bilinear between the centres of blocks."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.sparse import coo_matrix, csc_matrix, csr_matrix, diags_array, kron

from learnclosure.diagnosis.systems import smoothness_operator
from learnclosure.ensemble.grid import Geometry

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class Knots:
    """Knots of one layer.

    Attributes
    ----------
    weights : scipy.sparse.csr_matrix, shape (cell, knot), 1
        From knots to sea cells; not negative, rows sum to one.
    roughness : scipy.sparse.csc_matrix, shape (knot, knot), m-2
        Of ``sum A (lap k)^2``.
    """

    weights: csr_matrix
    roughness: csc_matrix


def interpolation(count: int, factor: int, periodic: bool) -> csr_matrix:
    """Linear interpolation from the centres of blocks of cells to the cells of one axis.

    Parameters
    ----------
    count : int
        Number of cells.
    factor : int
        Cells in a block; the last block may hold fewer.
    periodic : bool
        Whether to interpolate between the last and the first block; otherwise the end
        blocks' values hold out to the ends.

    Returns
    -------
    scipy.sparse.csr_matrix, shape (cell, block)

    Examples
    --------
    >>> interpolation(4, 2, False).toarray()
    array([[1.  , 0.  ],
           [0.75, 0.25],
           [0.25, 0.75],
           [0.  , 1.  ]])
    """
    starts = np.arange(0, count, factor)
    centres = starts + 0.5 * (np.minimum(factor, count - starts) - 1)
    blocks, cells = len(starts), np.arange(count)
    if periodic:
        places = np.concatenate([[centres[-1] - count], centres, [centres[0] + count]])
        names = np.concatenate([[blocks - 1], np.arange(blocks), [0]])
    else:
        places = np.concatenate([[-1.0], centres, [float(count)]])
        names = np.concatenate([[0], np.arange(blocks), [blocks - 1]])
    below = np.searchsorted(places, cells, side="right") - 1
    share = (cells - places[below]) / (places[below + 1] - places[below])
    rows = np.concatenate([cells, cells])
    columns = np.concatenate([names[below], names[below + 1]])
    values = np.concatenate([1.0 - share, share])
    return csr_matrix(coo_matrix((values, (rows, columns)), shape=(count, blocks)))


def _blocks(geometry: Geometry, layer: int, factor: int) -> Geometry:
    """Widths, mask and periodic axes of the blocks of one layer."""
    mask = geometry.mask[layer]
    starts = [np.arange(0, size, factor) for size in mask.shape]

    def summed(values: npt.NDArray[np.float64]) -> FloatArray:
        along_x = np.add.reduceat(values, starts[1], axis=1)
        return np.asarray(np.add.reduceat(along_x, starts[0], axis=0))

    sizes = [
        np.minimum(factor, size - start).astype(np.float64)
        for size, start in zip(mask.shape, starts, strict=True)
    ]
    return Geometry(
        dx=summed(geometry.dx) / sizes[0][:, None],
        dy=summed(geometry.dy) / sizes[1][None, :],
        mask=(summed(mask.astype(np.float64)) > 0.0)[None],
        periodic_x=geometry.periodic_x,
        periodic_y=geometry.periodic_y,
    )


def place_knots(
    geometry: Geometry, layer: int, wet: npt.NDArray[np.int64], area: FloatArray, factor: int
) -> Knots:
    """Place a knot at the centre of every block that holds sea.

    Parameters
    ----------
    geometry : Geometry
    layer : int
    wet : ndarray of int, shape (cell,)
        Flat indices of the sea cells.
    area : ndarray, shape (cell,), m2
        Sea area of each.
    factor : int
        Cells in a block along x and y; with one every cell is a knot.

    Returns
    -------
    Knots
    """
    rows, columns = geometry.mask.shape[1:]
    blocks = _blocks(geometry, layer, factor)
    sea = np.flatnonzero(blocks.mask[0])
    along = interpolation(rows, factor, geometry.periodic_y)
    across = interpolation(columns, factor, geometry.periodic_x)
    weights = csr_matrix(kron(along, across, format="csr"))[wet][:, sea]
    # Blocks without sea are no knots; the others near a cell share their weight.
    total = np.asarray(weights.sum(axis=1)).ravel()
    weights = csr_matrix(diags_array(1.0 / total) @ weights)
    smooth = smoothness_operator(blocks, 0)[sea][:, sea]
    each = np.asarray(weights.T @ area).ravel()
    return Knots(weights, csc_matrix(smooth.T @ diags_array(1.0 / each) @ smooth))
