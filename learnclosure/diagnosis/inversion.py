"""Smooth transport tensors with a floor on their symmetric part.

In every layer the tensor minimises, over its sea cells of area A,

    sum A tr[(K - B M^-1) M (K - B M^-1)^T] + l^2 m sum_faces (side/distance) |K_i - K_j|^2

with ``m = <tr M>/2``: where the mean gradients say much the data decide, where they say
little the neighbours do. The rows of K obey one sparse symmetric system. The floor on the
eigenvalues of S is kept by the alternating direction method of multipliers around that
system (Boyd et al. 2011, Foundations and Trends in Machine Learning 3, 1-122, section 5).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.sparse import bmat, coo_matrix, csc_matrix, diags_array
from scipy.sparse.linalg import splu

from learnclosure.diagnosis.tensor import (
    LARGEST_CONDITION_NUMBER,
    NormalEquations,
    condition_number,
    scalar_diffusivity,
    with_floor,
)
from learnclosure.ensemble.grid import Geometry
from learnclosure.study import DiagnosisSettings

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

ITERATIONS = 30
PENALTY_SHARE = 0.3
FEW_TRACERS = 4
PULL_FOR_FEW_TRACERS = 0.05


@dataclass(frozen=True)
class SmoothFit:
    """Tensors of one inversion.

    Attributes
    ----------
    tensor : ndarray, shape (layer, y, x, 2, 2), m2 s-1
        Zero on land.
    floored : ndarray of bool, shape (layer, y, x)
        Where the floor holds an eigenvalue up.
    """

    tensor: FloatArray
    floored: BoolArray


def _neighbour_pairs(mask: BoolArray, periodic: bool, axis: int) -> tuple[FloatArray, ...]:
    """Flat indices of sea cells and of their sea neighbours further up an axis."""
    rows, columns = mask.shape
    index = np.arange(rows * columns).reshape(rows, columns)
    there = mask & np.roll(mask, -1, axis)
    if not periodic:
        edge: list[slice] = [slice(None), slice(None)]
        edge[axis] = slice(-1, None)
        there[tuple(edge)] = False
    return index[there], np.roll(index, -1, axis)[there]


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
    mask = geometry.mask[layer]
    size = mask.size
    total = csc_matrix((size, size))
    for axis, along, across, periodic in (
        (1, geometry.dx, geometry.dy, geometry.periodic_x),
        (0, geometry.dy, geometry.dx, geometry.periodic_y),
    ):
        here, there = _neighbour_pairs(mask, periodic, axis)
        distance = 0.5 * (along.ravel()[here] + along.ravel()[there])
        side = 0.5 * (across.ravel()[here] + across.ravel()[there])
        strength = side / distance
        link = coo_matrix((strength, (here, there)), shape=(size, size))
        link = link + link.T
        total = total + diags_array(np.asarray(link.sum(axis=1)).ravel()) - link
    return csc_matrix(total)


class _LayerSystem:
    """The sparse system of one layer, factorised once for any number of right-hand sides."""

    def __init__(
        self, M: FloatArray, area: FloatArray, smoothness: csc_matrix, strength: float,
        wet: npt.NDArray[np.int64],
    ) -> None:  # fmt: skip
        smooth = strength * smoothness[wet][:, wet]
        # A cell that neither data nor neighbours reach is held at zero; the others are not.
        undetermined = condition_number(M) > LARGEST_CONDITION_NUMBER
        weak = 1e-12 * max(float(np.max(area * np.trace(M, axis1=-2, axis2=-1))), 1e-300)
        blocks = [[diags_array(area * M[:, a, b]) for b in range(2)] for a in range(2)]
        for a in range(2):
            blocks[a][a] = blocks[a][a] + smooth + diags_array(weak * undetermined)
        # The matrix is symmetric and positive definite: no pivoting, half the fill-in.
        self.factor = splu(
            csc_matrix(bmat(blocks)),
            permc_spec="MMD_AT_PLUS_A",
            diag_pivot_thresh=0.0,
            options={"SymmetricMode": True},
        )
        self.area = area

    def solve(self, right: FloatArray) -> FloatArray:
        """Solve for K, shape (cell, 2, 2), given B of the same shape."""
        scaled = self.area[:, None, None] * right
        sides = np.concatenate([scaled[:, :, 0], scaled[:, :, 1]])
        found = self.factor.solve(sides)
        count = len(self.area)
        return np.stack([found[:count], found[count:]], axis=-1)


def _fit_layer(
    M: FloatArray,
    B: FloatArray,
    scalar: FloatArray,
    area: FloatArray,
    smoothness: csc_matrix,
    wet: npt.NDArray[np.int64],
    settings: DiagnosisSettings,
    pull: float,
) -> tuple[FloatArray, BoolArray]:
    trace = np.trace(M, axis1=-2, axis2=-1)
    mean = 0.5 * float(np.sum(area * trace) / np.sum(area))
    identity = np.eye(2)
    M = M + pull * mean * identity
    B = B + pull * mean * scalar[:, None, None] * identity
    strength = settings.smoothing_length**2 * mean
    system = _LayerSystem(M, area, smoothness, strength, wet)
    free = system.solve(B)
    bounded = with_floor(free, settings.floor)
    if settings.floor_method == "projection" or np.array_equal(bounded, free):
        return bounded, _differs(bounded, free)
    rho = PENALTY_SHARE * 0.5 * float(np.median(trace[trace > 0.0]))
    penalised = _LayerSystem(M + rho * identity, area, smoothness, strength, wet)
    multiplier = np.zeros_like(free)
    fit = free
    for _ in range(ITERATIONS):
        bounded = with_floor(fit + multiplier, settings.floor)
        multiplier = multiplier + fit - bounded
        fit = penalised.solve(B + rho * (bounded - multiplier))
    bounded = with_floor(fit + multiplier, settings.floor)
    return bounded, _differs(bounded, fit + multiplier)


def _differs(bounded: FloatArray, free: FloatArray) -> BoolArray:
    change = np.abs(bounded - free).max(axis=(-2, -1))
    return np.asarray(change > 1e-9 * np.abs(free).max(axis=(-2, -1)))


class SmoothInversion:
    """The smooth inversion on one grid, for the whole ensemble and any part of it.

    Parameters
    ----------
    geometry : Geometry
    area : ndarray, shape (layer, y, x), m2
        Sea area of each cell.
    settings : DiagnosisSettings
        Smoothing length, floor and how it is kept.
    tracers : int
        Number of tracers, which decides the default pull to the scalar fit.
    """

    def __init__(
        self, geometry: Geometry, area: FloatArray, settings: DiagnosisSettings, tracers: int
    ) -> None:
        self.geometry = geometry
        self.area = area
        self.settings = settings
        default = PULL_FOR_FEW_TRACERS if tracers < FEW_TRACERS else 0.0
        self.pull = default if settings.scalar_pull is None else settings.scalar_pull
        self._smoothness = [
            smoothness_operator(geometry, layer) for layer in range(len(geometry.mask))
        ]

    def fit(self, equations: NormalEquations) -> SmoothFit:
        """Fit tensors to normal equations.

        Parameters
        ----------
        equations : NormalEquations

        Returns
        -------
        SmoothFit
        """
        tensor = np.zeros_like(equations.B)
        floored = np.zeros(self.geometry.mask.shape, dtype=bool)
        scalar = scalar_diffusivity(equations)
        for layer, smoothness in enumerate(self._smoothness):
            wet = np.flatnonzero(self.geometry.mask[layer])
            M = equations.M[layer].reshape(-1, 2, 2)[wet]
            if not np.trace(M, axis1=-2, axis2=-1).any():
                continue
            found, active = _fit_layer(
                M,
                equations.B[layer].reshape(-1, 2, 2)[wet],
                scalar[layer].ravel()[wet],
                self.area[layer].ravel()[wet],
                smoothness,
                wet,
                self.settings,
                self.pull,
            )
            tensor[layer].reshape(-1, 2, 2)[wet] = found
            floored[layer].reshape(-1)[wet] = active
        return SmoothFit(tensor, floored)
