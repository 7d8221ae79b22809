"""From moments to tensors, their errors and their skill on tracers never used."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.gauge import HelmholtzSolver
from learnclosure.diagnosis.inversion import SmoothFit, SmoothInversion
from learnclosure.diagnosis.memory import MemoryGradient
from learnclosure.diagnosis.moments import GroupMoments, Moments
from learnclosure.diagnosis.sampling import (
    spearman_brown,
    weighted_correlation,
)
from learnclosure.diagnosis.skill import divergence_skill, flux_skill
from learnclosure.diagnosis.tensor import (
    LARGEST_CONDITION_NUMBER,
    NormalEquations,
    condition_number,
    down_gradient,
    least_squares_tensor,
    leverage,
    normal_equations,
)
from learnclosure.ensemble.active import ACTIVE
from learnclosure.ensemble.grid import Geometry, divergence, gradient
from learnclosure.study import DiagnosisSettings

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

Form = Literal["local", "memory"]

LEAST_MEMBERS_FOR_JACKKNIFE = 3


@dataclass(frozen=True)
class GroupEstimate:
    """Gradients, fluxes and tensors of one group of members.

    Attributes
    ----------
    gradient, flux : dict of str to ndarray, shape (2, layer, y, x)
        Of every tracer, withheld ones included.
    acted_on : dict of str to ndarray, shape (2, layer, y, x)
        What the tensor acts on: the mean gradient, or the remembered one.
    equations : NormalEquations
    smooth : SmoothFit
    least_squares : ndarray, shape (layer, y, x, 2, 2), m2 s-1
    """

    gradient: dict[str, FloatArray]
    flux: dict[str, FloatArray]
    acted_on: dict[str, FloatArray]
    equations: NormalEquations
    smooth: SmoothFit
    least_squares: FloatArray


@dataclass(frozen=True)
class WithheldSkill:
    """Skill of tensors on tracers they were not fitted to, shape (tracer, layer) each."""

    tracers: tuple[str, ...]
    flux: FloatArray
    divergence: FloatArray
    divergent_flux: FloatArray
    least_squares_flux: FloatArray
    least_squares_divergence: FloatArray
    least_squares_divergent_flux: FloatArray


class Estimator:
    """Estimates tensors of one region from moments.

    Parameters
    ----------
    geometry : Geometry
    area : ndarray, shape (layer, y, x), m2
        Sea area of each cell.
    inversion : SmoothInversion
    tracers : tuple of str
        Tracers the tensor is fitted to.
    memory : MemoryGradient
        What the memory form acts on.
    gauge : HelmholtzSolver
        Takes the divergent part of fluxes.
    rotational_weight : float, optional
        What is left of the rest of each flux before it is inverted: 1 for the full flux, 0
        for its divergent part.
    """

    def __init__(
        self,
        geometry: Geometry,
        area: FloatArray,
        inversion: SmoothInversion,
        tracers: tuple[str, ...],
        memory: MemoryGradient,
        gauge: HelmholtzSolver,
        rotational_weight: float = 1.0,
    ) -> None:
        self.geometry = geometry
        self.area = area
        self.inversion = inversion
        self.tracers = tracers
        self.memory = memory
        self.form: Form = inversion.settings.form
        self.gauge = gauge
        self.rotational_weight = rotational_weight

    @classmethod
    def from_settings(
        cls,
        geometry: Geometry,
        area: FloatArray,
        settings: DiagnosisSettings,
        tracers: tuple[str, ...],
        mean: dict[str, FloatArray],
    ) -> Estimator:
        """Make the estimator of one region from a study's settings.

        Parameters
        ----------
        geometry : Geometry
        area : ndarray, shape (layer, y, x), m2
        settings : DiagnosisSettings
        tracers : tuple of str
        mean : dict of str to ndarray, shape (layer, y, x)
            Holds the mean ``x_velocity`` and ``y_velocity``, m s-1.

        Returns
        -------
        Estimator
        """
        memory = MemoryGradient(
            (mean["x_velocity"], mean["y_velocity"]), geometry,
            settings.memory_time, settings.blurring_length,
        )  # fmt: skip
        return cls(
            geometry,
            area,
            SmoothInversion(geometry, area, settings, len(tracers)),
            tracers,
            memory,
            HelmholtzSolver(geometry, settings.gauge_boundary),
            settings.kept_rotational_weight,
        )

    def gradients(self, mean: dict[str, FloatArray]) -> dict[str, FloatArray]:
        """Differentiate mean tracers, shape (2, layer, y, x) each."""
        return {name: np.stack(gradient(values, self.geometry)) for name, values in mean.items()}

    def acted_on(
        self, gradients: dict[str, FloatArray], form: Form | None = None
    ) -> dict[str, FloatArray]:
        """Return what the tensor of a form acts on, shape (2, layer, y, x) each."""
        if (form or self.form) == "local":
            return gradients
        return {name: self.memory(values) for name, values in gradients.items()}

    def equations(
        self, fluxes: dict[str, FloatArray], gradients: dict[str, FloatArray],
        tracers: tuple[str, ...] | None = None,
    ) -> NormalEquations:  # fmt: skip
        """Sum the normal equations of the tracers used."""
        names = self.tracers if tracers is None else tracers
        return normal_equations(
            self.gauge.shrunk(np.stack([fluxes[name] for name in names]), self.rotational_weight),
            np.stack([gradients[name] for name in names]),
            self.area,
        )

    def group(self, moments: GroupMoments, form: Form | None = None) -> GroupEstimate:
        """Estimate everything of one group of members.

        Parameters
        ----------
        moments : GroupMoments
        form : {"local", "memory"}, optional
            Form of the tensor in place of the settings'.

        Returns
        -------
        GroupEstimate
        """
        fluxes = {name: flux for name, flux in moments.flux.items() if name not in ACTIVE}
        gradients = self.gradients({name: moments.mean[name] for name in fluxes})
        acted_on = self.acted_on(gradients, form)
        equations = self.equations(fluxes, acted_on)
        return GroupEstimate(
            gradient=gradients,
            flux=fluxes,
            acted_on=acted_on,
            equations=equations,
            smooth=self.inversion.fit(equations),
            least_squares=least_squares_tensor(equations),
        )

    def determined(self, equations: NormalEquations) -> BoolArray:
        """Tell where the mean gradients determine a tensor, shape (layer, y, x)."""
        condition = condition_number(equations.M)
        return self.geometry.mask & (condition <= LARGEST_CONDITION_NUMBER)

    def left_out(self, moments: Moments) -> FloatArray | None:
        """Fit the smooth tensor without each member in turn.

        Parameters
        ----------
        moments : Moments

        Returns
        -------
        ndarray, shape (member, layer, y, x, 2, 2), m2 s-1, or None
            None with fewer than three members.
        """
        members = len(next(iter(moments.member_product.values())))
        if members < LEAST_MEMBERS_FOR_JACKKNIFE:
            return None
        tensors = []
        for member in range(members):
            mean, flux = moments.without_member(member)
            used = {name: mean[name] for name in self.tracers}
            equations = self.equations(flux, self.acted_on(self.gradients(used)))
            tensors.append(self.inversion.fit(equations).tensor)
        return np.stack(tensors)

    def leverages(self, estimate: GroupEstimate, tracers: tuple[str, ...]) -> dict[str, FloatArray]:
        """Compute the leverage of named tracers, shape (layer, y, x)."""
        return {
            name: leverage(estimate.equations, estimate.acted_on[name], self.area)
            for name in tracers
        }

    def withheld_skill(
        self, estimate: GroupEstimate, withheld: tuple[str, ...], valid: BoolArray
    ) -> WithheldSkill | None:
        """Score fluxes and divergences of tracers that took no part in the fit.

        Without withheld tracers each tracer in turn is left out of a fit of its own.

        Parameters
        ----------
        estimate : GroupEstimate
        withheld : tuple of str
        valid : ndarray of bool, shape (layer, y, x)

        Returns
        -------
        WithheldSkill or None
            None where no tracer can be left out.
        """
        names = withheld or self.tracers
        if not withheld and len(self.tracers) < 3:
            return None
        scores: list[tuple[FloatArray, ...]] = []
        for name in names:
            smooth, plain = estimate.smooth.tensor, estimate.least_squares
            if not withheld:
                rest = tuple(other for other in self.tracers if other != name)
                equations = self.equations(estimate.flux, estimate.acted_on, rest)
                smooth = self.inversion.fit(equations).tensor
                plain = least_squares_tensor(equations)
            scores.append(
                (*self.score(smooth, estimate, name, valid),
                 *self.score(plain, estimate, name, valid))
            )  # fmt: skip
        columns = [np.stack(column) for column in zip(*scores, strict=True)]
        return WithheldSkill(names, *columns)

    def score(
        self, tensor: FloatArray, estimate: GroupEstimate, name: str, valid: BoolArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Score a tensor on the flux of one tracer, its divergence and its divergent part.

        Parameters
        ----------
        tensor : ndarray, shape (layer, y, x, 2, 2), m2 s-1
        estimate : GroupEstimate
            Holds the tracer's flux and what the tensor acts on.
        name : str
        valid : ndarray of bool, shape (layer, y, x)

        Returns
        -------
        flux, divergence, divergent_flux : ndarray, shape (layer,)
            Coefficients of determination.
        """
        true = estimate.flux[name][None]
        predicted = down_gradient(tensor, estimate.acted_on[name][None])
        weights = np.where(valid, self.area, 0.0)
        spread = np.stack(
            [divergence(flux[0, 0], flux[0, 1], self.geometry) for flux in (predicted, true)]
        )
        of_flux = flux_skill(predicted, true, weights)
        of_divergence = divergence_skill(spread[0][None], spread[1][None], weights)
        parts = self.gauge.divergent_part(np.stack([predicted, true]))
        of_part = flux_skill(parts[0], parts[1], weights)
        # A flux that does not vary has a divergence of rounding errors only.
        still = np.isnan(of_flux)
        return of_flux, np.where(still, np.nan, of_divergence), np.where(still, np.nan, of_part)

    def component_reliability(
        self, halves: tuple[GroupEstimate, ...], valid: BoolArray
    ) -> FloatArray:
        """Compare halves for the reliability of each component, shape (2, 2, layer)."""
        weights = np.where(valid, self.area, 0.0)
        first, second = (np.moveaxis(half.smooth.tensor, (-2, -1), (0, 1)) for half in halves)
        return spearman_brown(weighted_correlation(first, second, weights))

    def flux_reliability(self, halves: tuple[GroupEstimate, ...], valid: BoolArray) -> FloatArray:
        """Compare halves for the mean reliability of eddy fluxes, shape (layer,)."""
        weights = np.where(valid, self.area, 0.0)
        found = []
        for name in halves[0].flux:
            first, second = (half.flux[name] for half in halves)
            found.append(spearman_brown(weighted_correlation(first, second, weights)))
        return np.asarray(np.mean(found, axis=(0, 1)))
