"""The divergent part of eddy fluxes: Helmholtz decomposition on the model's own operators.

A flux changes a tracer only through its divergence, yet the flux without divergence that
may be added to it, its gauge, is often the larger part. On a grid the divergent part is

    the smallest flux, in the mean square over the sea, that agrees with J in C J

where the rows of C are what must not be lost: the finite-volume divergence of cells and
whatever the boundary condition holds. So it is an orthogonal projection, ``J_d = C^* chi``
with ``C C^* chi = C J``, that is ``-grad`` of a potential (the adjoint of the divergence is
minus the centred gradient); the remainder has no divergence by the very operator that
scores divergences elsewhere. On a bounded domain the decomposition is not unique (Fox-Kemper,
Ferrari and Pedlosky 2003, J. Phys. Oceanogr. 33, 478-483): harmonic fluxes may stand in
either part. Three choices, each holding less than the one before:

``no-flux``
    The remainder passes no coast: ``n.grad chi = n.J``. Holds the divergence of every
    cell, the flux normal to the coast in the cells along it, and along a periodic axis the
    mean flux of each basin that reaches round it. Harmonic fluxes count as divergent.
``zero-potential``
    The potential is constant along each coast. Holds the divergence of cells off the coast
    and what converges on each coast altogether; with one coast the potential may be put to
    zero there.
``least-flux``
    The potential is zero on every coast. Holds only the divergence of cells off the coast,
    and so is the divergent part of least mean square of all (the idea of Maddison, Marshall
    and Shipton 2015, Ocean Modelling 92, 169-182, from memory). Harmonic fluxes count as
    rotational. It equals ``zero-potential`` where there is at most one coast.

In the last two some of the divergence in the cells along a coast leaves through the coast,
as it must when the potential, not its slope, is given there.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.sparse import block_diag, coo_matrix, csr_matrix, diags_array, hstack, identity, vstack
from scipy.sparse.csgraph import connected_components
from scipy.sparse.linalg import splu

from learnclosure.ensemble.grid import Geometry
from learnclosure.study import GaugeBoundary

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]
IndexArray = npt.NDArray[np.int64]

REGULARISATION = 1e-12
"""Lifts the null vectors of ``C C^*`` (constants, chequerboards), rows of C having length 1."""

REFINEMENTS = 3
"""Each multiplies the error that the regularisation leaves by its ratio to an eigenvalue."""

AROUND = ((0, 1), (1, 0), (1, 1), (1, -1))


@dataclass(frozen=True)
class _Sea:
    """Sea cells of one layer, numbered, with their widths.

    Attributes
    ----------
    number : ndarray of int, shape (y, x)
        Number of each sea cell, -1 on land.
    dx, dy : ndarray, shape (cell,), m
    periodic : tuple of bool
        Along y and along x.
    """

    number: IndexArray
    dx: FloatArray
    dy: FloatArray
    periodic: tuple[bool, bool]

    def pairs(self, cells: BoolArray, step: tuple[int, int]) -> tuple[IndexArray, IndexArray]:
        """Numbers of cells, and of the cells one step (rows, columns) away, both marked."""
        there = cells & np.roll(cells, (-step[0], -step[1]), (0, 1))
        for axis, (length, periodic) in enumerate(zip(step, self.periodic, strict=True)):
            if length and not periodic:
                edge: list[slice] = [slice(None), slice(None)]
                edge[axis] = slice(-1, None) if length > 0 else slice(0, 1)
                there[tuple(edge)] = False
        far = np.roll(self.number, (-step[0], -step[1]), (0, 1))
        return self.number[there], far[there]

    def connected(self, cells: BoolArray, steps: tuple[tuple[int, int], ...]) -> IndexArray:
        """Label the connected part each marked cell belongs to, shape (cell,), else -1."""
        here, there = (
            np.concatenate(ends)
            for ends in zip(*(self.pairs(cells, step) for step in steps), strict=True)
        )
        size = len(self.dx)
        links = coo_matrix((np.ones(len(here)), (here, there)), shape=(size, size))
        part = np.asarray(connected_components(links, directed=False)[1], dtype=np.int64)
        marked = self.number[cells]
        result = np.full(size, -1, dtype=np.int64)
        result[marked] = np.unique(part[marked], return_inverse=True)[1]
        return result


def _divergence_rows(sea: _Sea) -> tuple[list[csr_matrix], list[BoolArray]]:
    """Area times divergence, one matrix for each component, and which cells are at a coast."""
    wet = sea.number >= 0
    size = len(sea.dx)
    rows, coast = [], []
    for step, across in (((0, 1), sea.dy), ((1, 0), sea.dx)):
        here, there = sea.pairs(wet, step)
        half = 0.25 * (across[here] + across[there])
        values = np.concatenate([half, half, -half, -half])
        cells = np.concatenate([here, here, there, there])
        of = np.concatenate([here, there, here, there])
        rows.append(csr_matrix((values, (cells, of)), shape=(size, size)))
        faces = np.bincount(here, minlength=size) + np.bincount(there, minlength=size)
        coast.append(faces < 2)
    return rows, coast


def _sums(groups: IndexArray) -> csr_matrix:
    """Sum over the cells of each group; cells of group -1 count nowhere."""
    member = np.flatnonzero(groups >= 0)
    shape = (int(groups.max(initial=-1)) + 1, len(groups))
    return csr_matrix((np.ones(len(member)), (groups[member], member)), shape=shape)


def _reaching_round(
    basin: IndexArray, place: IndexArray, length: int, periodic: bool
) -> csr_matrix:
    """Sum over the cells of each basin with cells at every place of a periodic axis."""
    total = _sums(basin)
    if not periodic:
        return total[:0]
    taken = np.unique(np.stack([basin, place]), axis=1)[0]
    return total[np.bincount(taken, minlength=total.shape[0]) == length]


def _constraints(sea: _Sea, boundary: GaugeBoundary) -> csr_matrix:
    """Rows of C for one layer, columns (x component, y component) of the sea cells."""
    components, coast = _divergence_rows(sea)
    divergence = csr_matrix(hstack(components))
    at_coast = coast[0] | coast[1]
    if boundary == "least-flux":
        return csr_matrix(divergence[~at_coast])
    wet = sea.number >= 0
    if boundary == "zero-potential":
        along = np.zeros(wet.shape, dtype=bool)
        along[wet] = at_coast
        coasts = _sums(sea.connected(along, AROUND))
        return csr_matrix(vstack([divergence[~at_coast], coasts @ divergence]))
    size = len(sea.dx)
    normal = csr_matrix(identity(2 * size))[np.flatnonzero(np.concatenate(coast))]
    basin = sea.connected(wet, AROUND[:2])
    around_x, around_y = (
        _reaching_round(basin, np.nonzero(wet)[axis], wet.shape[axis], sea.periodic[axis])
        @ diags_array(sea.dx * sea.dy)
        for axis in (1, 0)
    )
    means = block_diag([around_x, around_y])
    return csr_matrix(vstack([divergence, normal, means]))


class _LayerProjection:
    """The projection of one layer, factorised once for any number of fluxes."""

    def __init__(self, sea: _Sea, boundary: GaugeBoundary) -> None:
        self.root = np.sqrt(np.tile(sea.dx * sea.dy, 2))[:, None]
        rows = csr_matrix(_constraints(sea, boundary) @ diags_array(1.0 / self.root[:, 0]))
        length = np.sqrt(np.asarray(rows.multiply(rows).sum(axis=1)).ravel())
        rows = rows[length > 0.0]
        self.rows = csr_matrix(diags_array(1.0 / length[length > 0.0]) @ rows)
        self.factor = None
        if self.rows.shape[0]:
            normal = self.rows @ self.rows.T + REGULARISATION * identity(self.rows.shape[0])
            # Symmetric and positive definite: no pivoting, half the fill-in.
            self.factor = splu(
                normal.tocsc(),
                permc_spec="MMD_AT_PLUS_A",
                diag_pivot_thresh=0.0,
                options={"SymmetricMode": True},
            )

    def project(self, flux: FloatArray) -> FloatArray:
        """Project fluxes, shape (2 cells, flux)."""
        if self.factor is None:
            return np.zeros_like(flux)
        scaled = self.root * flux
        found = np.zeros_like(scaled)
        for _ in range(REFINEMENTS):
            lost = self.rows @ (scaled - found)
            found = found + self.rows.T @ self.factor.solve(lost)
        return np.asarray(found / self.root)


class HelmholtzSolver:
    """Divergent parts of fluxes on one grid.

    Each layer is factorised once; layers with the same sea share the factor.

    Parameters
    ----------
    geometry : Geometry
        Periodic, channel and closed domains with or without land; basins that do not
        touch are decomposed each by itself.
    boundary : {"no-flux", "zero-potential", "least-flux"}, optional
        What is held at coasts, see the module. Cells are at a coast if one of their four
        faces is closed; a strait two cells wide or less joins the coasts of its sides.

    Examples
    --------
    >>> import numpy as np
    >>> width = np.full((6, 6), 1e4)
    >>> box = Geometry(width, width, np.ones((1, 6, 6), bool), True, True)
    >>> spin = np.cos(np.arange(6) * np.pi / 3.0)
    >>> flux = np.stack([spin[:, None] + 0.0 * spin, np.zeros((6, 6))])[:, None]
    >>> part = HelmholtzSolver(box).divergent_part(flux)
    >>> float(rotational_share(flux, part, np.full((1, 6, 6), 1e8))[0].round(12))
    1.0
    """

    def __init__(self, geometry: Geometry, boundary: GaugeBoundary = "no-flux") -> None:
        self.geometry = geometry
        self.boundary = boundary
        self._known: dict[bytes, _LayerProjection] = {}

    def divergent_part(self, flux: FloatArray) -> FloatArray:
        """Take the divergent part of fluxes.

        Parameters
        ----------
        flux : ndarray, shape (..., 2, layer, y, x)
            Components along x and y at cell centres; what stands on land is ignored.

        Returns
        -------
        ndarray, shape (..., 2, layer, y, x)
            Units of the flux; zero on land. Its `divergence` is that of the flux, to
            rounding, in every cell for ``no-flux`` and in every cell off the coast for the
            other choices.
        """
        mask = self.geometry.mask
        if flux.shape[-4:] != (2, *mask.shape):
            raise ValueError(f"flux of shape {flux.shape} on a grid of shape {mask.shape}")
        result = np.zeros(flux.shape)
        for layer, wet in enumerate(mask):
            if not wet.any():
                continue
            cells = flux[..., layer, :, :][..., wet]
            columns = cells.reshape(-1, cells.shape[-2] * cells.shape[-1]).T
            part = self._projection(wet).project(np.ascontiguousarray(columns, dtype=np.float64))
            result[..., layer, wet] = part.T.reshape(cells.shape)
        return result

    def shrunk(self, flux: FloatArray, weight: float) -> FloatArray:
        """Take the divergent part of fluxes and a share of the rest.

        The rest carries what the advection of tracer variance puts there (Marshall and
        Shutts 1981, J. Phys. Oceanogr. 11, 1677-1680, from memory), which no local tensor
        can follow, next to what a local tensor does make.

        Parameters
        ----------
        flux : ndarray, shape (..., 2, layer, y, x)
        weight : float
            Share of the rotational part that stays: 1 gives the flux itself.

        Returns
        -------
        ndarray, shape (..., 2, layer, y, x)
            Units of the flux.
        """
        if weight == 1.0:
            return flux
        part = self.divergent_part(flux)
        return part if weight == 0.0 else part + weight * (flux - part)

    def _projection(self, wet: BoolArray) -> _LayerProjection:
        key = wet.tobytes()
        if key not in self._known:
            number = np.full(wet.shape, -1, dtype=np.int64)
            number[wet] = np.arange(int(wet.sum()))
            geometry = self.geometry
            periodic = (geometry.periodic_y, geometry.periodic_x)
            sea = _Sea(number, geometry.dx[wet], geometry.dy[wet], periodic)
            self._known[key] = _LayerProjection(sea, self.boundary)
        return self._known[key]


def rotational_share(flux: FloatArray, divergent: FloatArray, area: FloatArray) -> FloatArray:
    """Share of the mean square of a flux that is not in its divergent part.

    Parameters
    ----------
    flux, divergent : ndarray, shape (..., 2, layer, y, x)
        A flux and its divergent part.
    area : ndarray, shape (layer, y, x), m2
        Sea area of each cell; what stands where it is zero is ignored.

    Returns
    -------
    ndarray, shape (..., layer), 1
        Between 0 and 1; NaN where there is no flux.
    """
    counted = area > 0.0
    weight = np.where(counted, area, 0.0)
    whole, rest = np.where(counted, flux, 0.0), np.where(counted, flux - divergent, 0.0)
    square, remainder = ((weight * part**2).sum(axis=(-4, -2, -1)) for part in (whole, rest))
    known = square > 0.0
    return np.asarray(np.where(known, remainder / np.where(known, square, 1.0), np.nan))
