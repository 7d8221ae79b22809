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
from scipy.sparse import csr_matrix

from learnclosure.diagnosis.systems import (
    LARGEST_DIRECT,
    DirectSystem,
    IterativeSystem,
    LayerSystem,
    smoothness_operator,
)
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
IndexArray = npt.NDArray[np.int64]

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
    negative : ndarray of bool, shape (layer, y, x)
        Where the symmetric part would have a negative eigenvalue without the floor.
    """

    tensor: FloatArray
    floored: BoolArray
    negative: BoolArray


class SmoothInversion:
    """The smooth inversion on one grid, for the whole ensemble and any part of it.

    Parameters
    ----------
    geometry : Geometry
    area : ndarray, shape (layer, y, x), m2
        Sea area of each cell.
    settings : DiagnosisSettings
        Smoothing length, floor, how it is kept and how the systems are solved.
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
        self._wet = [np.flatnonzero(mask) for mask in geometry.mask]
        self._smoothness = [
            csr_matrix(smoothness_operator(geometry, layer)[wet][:, wet])
            for layer, wet in enumerate(self._wet)
        ]

    def fit(
        self,
        equations: NormalEquations,
        *,
        length: float | None = None,
        floor: bool = True,
    ) -> SmoothFit:
        """Fit tensors to normal equations.

        Parameters
        ----------
        equations : NormalEquations
        length : float, optional, m
            Smoothing length in place of the settings'.
        floor : bool, optional
            Whether the floor is kept; without it the fit is linear in the fluxes.

        Returns
        -------
        SmoothFit
        """
        chosen = self.settings.smoothing_length if length is None else length
        tensor = np.zeros_like(equations.B)
        floored = np.zeros(self.geometry.mask.shape, dtype=bool)
        negative = np.zeros_like(floored)
        scalar = scalar_diffusivity(equations)
        for layer, wet in enumerate(self._wet):
            M = equations.M[layer].reshape(-1, 2, 2)[wet]
            if not np.trace(M, axis1=-2, axis2=-1).any():
                continue
            fit = _LayerFit(
                M,
                equations.B[layer].reshape(-1, 2, 2)[wet],
                scalar[layer].ravel()[wet],
                self.area[layer].ravel()[wet],
                self._smoothness[layer],
                chosen,
                self.pull,
                self._direct(len(wet)),
            )
            free = fit.free()
            bounded = self._bounded(fit, free) if floor else free
            tensor[layer].reshape(-1, 2, 2)[wet] = bounded
            floored[layer].reshape(-1)[wet] = floor & _differs(bounded, fit.unbounded)
            negative[layer].reshape(-1)[wet] = _differs(with_floor(free, 0.0), free)
        return SmoothFit(tensor, floored, negative)

    def _direct(self, cells: int) -> bool:
        if self.settings.solver == "auto":
            return cells <= LARGEST_DIRECT
        return self.settings.solver == "direct"

    def _bounded(self, fit: _LayerFit, free: FloatArray) -> FloatArray:
        bounded = with_floor(free, self.settings.floor)
        if self.settings.floor_method == "projection" or np.array_equal(bounded, free):
            return bounded
        return fit.bounded(self.settings.floor)


class _LayerFit:
    """The fit of one layer's sea cells, without a floor and then with one."""

    def __init__(
        self, M: FloatArray, B: FloatArray, scalar: FloatArray, area: FloatArray,
        smoothness: csr_matrix, length: float, pull: float, direct: bool,
    ) -> None:  # fmt: skip
        self._trace = np.trace(M, axis1=-2, axis2=-1)
        mean = 0.5 * float(np.sum(area * self._trace) / np.sum(area))
        identity = np.eye(2)
        self._M = M + pull * mean * identity
        self._B = B + pull * mean * scalar[:, None, None] * identity
        self._area = area
        self._smooth = length**2 * mean * smoothness
        self._kind = DirectSystem if direct else IterativeSystem

    def _system(self, M: FloatArray) -> LayerSystem:
        undetermined = condition_number(M) > LARGEST_CONDITION_NUMBER
        return self._kind(M, self._area, self._smooth, undetermined)

    def free(self) -> FloatArray:
        """Fit without a floor, shape (cell, 2, 2)."""
        self.unbounded = self._system(self._M).solve(self._B)
        return self.unbounded

    def bounded(self, floor: float) -> FloatArray:
        """Fit with a floor, shape (cell, 2, 2); to be called after ``free``."""
        rho = PENALTY_SHARE * 0.5 * float(np.median(self._trace[self._trace > 0.0]))
        penalised = self._system(self._M + rho * np.eye(2))
        fit = self.unbounded
        multiplier = np.zeros_like(fit)
        for _ in range(ITERATIONS):
            bounded = with_floor(fit + multiplier, floor)
            multiplier = multiplier + fit - bounded
            fit = penalised.solve(self._B + rho * (bounded - multiplier), fit)
        self.unbounded = fit + multiplier
        return with_floor(self.unbounded, floor)


def _differs(bounded: FloatArray, free: FloatArray) -> BoolArray:
    change = np.abs(bounded - free).max(axis=(-2, -1))
    return np.asarray(change > 1e-9 * np.abs(free).max(axis=(-2, -1)))
