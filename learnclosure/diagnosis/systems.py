"""The sparse systems behind smooth transport tensors, solved directly or by iteration."""

from __future__ import annotations

from typing import Protocol

import numpy as np
import numpy.typing as npt
from scipy.sparse import bmat, coo_matrix, csc_matrix, csr_matrix, diags_array
from scipy.sparse.linalg import LinearOperator, cg, splu

from learnclosure.ensemble.grid import Geometry
from learnclosure.errors import DiagnosisError

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]
IndexArray = npt.NDArray[np.int64]

LARGEST_DIRECT = 60_000
"""Cells of a layer up to which factorising costs less than iterating (measured)."""

RESIDUAL = 1e-13
"""Residual of the iteration over the size of the right-hand side."""

MOST_ITERATIONS = 20_000


class LayerSystem(Protocol):
    """One layer's system, set up once for any number of right-hand sides."""

    def solve(self, right: FloatArray, start: FloatArray | None = None) -> FloatArray:
        """Solve for K, shape (cell, n, n), given B of the same shape and perhaps a guess."""
        ...


def _neighbour_pairs(mask: BoolArray, periodic: bool, axis: int) -> tuple[IndexArray, IndexArray]:
    """Flat indices of sea cells and of their sea neighbours further up an axis."""
    rows, columns = mask.shape
    index = np.arange(rows * columns).reshape(rows, columns)
    there = mask & np.roll(mask, -1, axis)
    if not periodic:
        edge: list[slice] = [slice(None), slice(None)]
        edge[axis] = slice(-1, None)
        there[tuple(edge)] = False
    return index[there], np.roll(index, -1, axis)[there]


def sea_faces(
    geometry: Geometry, layer: int
) -> list[tuple[int, IndexArray, IndexArray, FloatArray, FloatArray]]:
    """List the faces between sea cells of a layer.

    Parameters
    ----------
    geometry : Geometry
    layer : int

    Returns
    -------
    list of tuple
        For x, then for y: number of the axis from the end (-1 for x, -2 for y), flat
        indices of the cells behind and ahead of each face, distance of their centres and
        length of the face, both in m.
    """
    mask = geometry.mask[layer]
    found = []
    for axis, along, across, periodic in (
        (-1, geometry.dx, geometry.dy, geometry.periodic_x),
        (-2, geometry.dy, geometry.dx, geometry.periodic_y),
    ):
        here, there = _neighbour_pairs(mask, periodic, axis + 2)
        distance = 0.5 * (along.ravel()[here] + along.ravel()[there])
        side = 0.5 * (across.ravel()[here] + across.ravel()[there])
        found.append((axis, here, there, distance, side))
    return found


def smoothness_operator(geometry: Geometry, layer: int) -> csc_matrix:
    """Matrix of ``sum_faces (side/distance) (K_i - K_j)^2`` over the sea of a layer.

    Parameters
    ----------
    geometry : Geometry
    layer : int

    Returns
    -------
    scipy.sparse.csc_matrix, shape (y x, y x), 1
    """
    size = geometry.mask[layer].size
    total = csc_matrix((size, size))
    for _axis, here, there, distance, side in sea_faces(geometry, layer):
        link = coo_matrix((side / distance, (here, there)), shape=(size, size))
        link = link + link.T
        total = total + diags_array(np.asarray(link.sum(axis=1)).ravel()) - link
    return csc_matrix(total)


def _columns(right: FloatArray) -> FloatArray:
    """Put the columns of each cell's K under one another, one row of K a column."""
    return np.concatenate(list(np.moveaxis(right, -1, 0)))


def _cells(found: FloatArray) -> FloatArray:
    size = found.shape[1]
    return np.moveaxis(found.reshape(size, -1, size), 0, -1)


def _matrix(
    M: FloatArray, area: FloatArray, smooth: csr_matrix, undetermined: BoolArray
) -> csr_matrix:
    # A cell that neither data nor neighbours reach is held at zero; the others are not.
    weak = 1e-12 * max(float(np.max(area * np.trace(M, axis1=-2, axis2=-1))), 1e-300)
    axes = range(M.shape[-1])
    blocks = [[diags_array(area * M[:, a, b]) for b in axes] for a in axes]
    for a in axes:
        blocks[a][a] = blocks[a][a] + smooth + diags_array(weak * undetermined)
    return bmat(blocks, format="csr")


class DirectSystem:
    """A layer's system, factorised.

    Parameters
    ----------
    M : ndarray, shape (cell, n, n)
    area : ndarray, shape (cell,), m2
    smooth : sparse matrix, shape (cell, cell), m2
        The smoothness operator times its strength.
    undetermined : ndarray of bool, shape (cell,)
        Where the gradients do not determine a tensor.
    """

    def __init__(
        self, M: FloatArray, area: FloatArray, smooth: csr_matrix, undetermined: BoolArray
    ) -> None:
        # The matrix is symmetric and positive definite: no pivoting, half the fill-in.
        self._factor = splu(
            csc_matrix(_matrix(M, area, smooth, undetermined)),
            permc_spec="MMD_AT_PLUS_A",
            diag_pivot_thresh=0.0,
            options={"SymmetricMode": True},
        )
        self._area = area

    def solve(self, right: FloatArray, start: FloatArray | None = None) -> FloatArray:
        """Solve for K, shape (cell, n, n), given B of the same shape; no guess is needed."""
        del start
        sides = _columns(self._area[:, None, None] * right)
        return _cells(self._factor.solve(sides))


class IterativeSystem:
    """A layer's system, solved by conjugate gradients that know each cell's own block.

    Parameters
    ----------
    M : ndarray, shape (cell, 2, 2)
    area : ndarray, shape (cell,), m2
    smooth : sparse matrix, shape (cell, cell), m2
        The smoothness operator times its strength.
    undetermined : ndarray of bool, shape (cell,)
        Where the gradients do not determine a tensor.

    Notes
    -----
    Hestenes and Stiefel 1952, Journal of Research of the National Bureau of Standards 49,
    409-436; preconditioned by the inverse of the two-by-two blocks on the diagonal.
    """

    def __init__(
        self, M: FloatArray, area: FloatArray, smooth: csr_matrix, undetermined: BoolArray
    ) -> None:
        self._matrix = _matrix(M, area, smooth, undetermined)
        self._area = area
        count = len(area)
        diagonal = self._matrix.diagonal()
        first, second = diagonal[:count], diagonal[count:]
        cross = area * M[:, 0, 1]
        determinant = first * second - cross * cross
        self._inverse = (second / determinant, -cross / determinant, first / determinant)

    def _precondition(self, residual: FloatArray) -> FloatArray:
        count = len(self._area)
        upper, lower = residual[:count], residual[count:]
        a, b, c = self._inverse
        return np.concatenate([a * upper + b * lower, b * upper + c * lower])

    def solve(self, right: FloatArray, start: FloatArray | None = None) -> FloatArray:
        """Solve for K, shape (cell, 2, 2), given B of the same shape and perhaps a guess.

        Raises
        ------
        DiagnosisError
            If the iteration does not converge.
        """
        sides = _columns(self._area[:, None, None] * right)
        guess = np.zeros_like(sides) if start is None else _columns(start)
        size = len(sides)
        nearly_inverse = LinearOperator((size, size), matvec=self._precondition, dtype=float)
        found = np.empty_like(sides)
        for row in range(sides.shape[1]):
            found[:, row], failed = cg(
                self._matrix, sides[:, row], x0=guess[:, row], rtol=RESIDUAL,
                maxiter=MOST_ITERATIONS, M=nearly_inverse,
            )  # fmt: skip
            if failed:
                raise DiagnosisError(
                    "the smooth inversion does not converge",
                    found=f"{MOST_ITERATIONS} iterations",
                    remedy="set [diagnosis] solver = 'direct', or a shorter smoothing_length",
                )
        return _cells(found)
