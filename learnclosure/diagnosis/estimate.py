"""From moments to tensors, their errors and their skill on tracers never used."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.inversion import SmoothFit, SmoothInversion
from learnclosure.diagnosis.moments import GroupMoments, Moments
from learnclosure.diagnosis.sampling import (
    jackknife_standard_error,
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

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

LEAST_MEMBERS_FOR_JACKKNIFE = 3


@dataclass(frozen=True)
class GroupEstimate:
    """Gradients, fluxes and tensors of one group of members.

    Attributes
    ----------
    gradient, flux : dict of str to ndarray, shape (2, layer, y, x)
        Of every tracer, withheld ones included.
    equations : NormalEquations
    smooth : SmoothFit
    least_squares : ndarray, shape (layer, y, x, 2, 2), m2 s-1
    """

    gradient: dict[str, FloatArray]
    flux: dict[str, FloatArray]
    equations: NormalEquations
    smooth: SmoothFit
    least_squares: FloatArray


@dataclass(frozen=True)
class WithheldSkill:
    """Skill of tensors on tracers they were not fitted to, shape (tracer, layer) each."""

    tracers: tuple[str, ...]
    flux: FloatArray
    divergence: FloatArray
    least_squares_flux: FloatArray
    least_squares_divergence: FloatArray


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
    """

    def __init__(
        self,
        geometry: Geometry,
        area: FloatArray,
        inversion: SmoothInversion,
        tracers: tuple[str, ...],
    ) -> None:
        self.geometry = geometry
        self.area = area
        self.inversion = inversion
        self.tracers = tracers

    def gradients(self, mean: dict[str, FloatArray]) -> dict[str, FloatArray]:
        """Differentiate mean tracers, shape (2, layer, y, x) each."""
        return {name: np.stack(gradient(values, self.geometry)) for name, values in mean.items()}

    def equations(
        self, fluxes: dict[str, FloatArray], gradients: dict[str, FloatArray],
        tracers: tuple[str, ...] | None = None,
    ) -> NormalEquations:  # fmt: skip
        """Sum the normal equations of the tracers used."""
        names = self.tracers if tracers is None else tracers
        return normal_equations(
            np.stack([fluxes[name] for name in names]),
            np.stack([gradients[name] for name in names]),
            self.area,
        )

    def group(self, moments: GroupMoments) -> GroupEstimate:
        """Estimate everything of one group of members.

        Parameters
        ----------
        moments : GroupMoments

        Returns
        -------
        GroupEstimate
        """
        fluxes = {name: flux for name, flux in moments.flux.items() if name not in ACTIVE}
        gradients = self.gradients({name: moments.mean[name] for name in fluxes})
        equations = self.equations(fluxes, gradients)
        return GroupEstimate(
            gradient=gradients,
            flux=fluxes,
            equations=equations,
            smooth=self.inversion.fit(equations),
            least_squares=least_squares_tensor(equations),
        )

    def determined(self, equations: NormalEquations) -> BoolArray:
        """Tell where the mean gradients determine a tensor, shape (layer, y, x)."""
        condition = condition_number(equations.M)
        return self.geometry.mask & (condition <= LARGEST_CONDITION_NUMBER)

    def standard_error(self, moments: Moments) -> FloatArray | None:
        """Compute the member jackknife error of the smooth tensor.

        Parameters
        ----------
        moments : Moments

        Returns
        -------
        ndarray, shape (layer, y, x, 2, 2), m2 s-1, or None
            None with fewer than three members.
        """
        members = len(next(iter(moments.member_product.values())))
        if members < LEAST_MEMBERS_FOR_JACKKNIFE:
            return None
        left_out = []
        for member in range(members):
            mean, flux = moments.without_member(member)
            equations = self.equations(flux, self.gradients(mean))
            left_out.append(self.inversion.fit(equations).tensor)
        return jackknife_standard_error(np.stack(left_out))

    def leverages(
        self, estimate: GroupEstimate, withheld: tuple[str, ...]
    ) -> dict[str, FloatArray]:
        """Compute the leverage of each withheld tracer, shape (layer, y, x)."""
        return {
            name: leverage(estimate.equations, estimate.gradient[name], self.area)
            for name in withheld
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
                equations = self.equations(estimate.flux, estimate.gradient, rest)
                smooth = self.inversion.fit(equations).tensor
                plain = least_squares_tensor(equations)
            scores.append(
                (*self._score(smooth, estimate, name, valid),
                 *self._score(plain, estimate, name, valid))
            )  # fmt: skip
        columns = [np.stack(column) for column in zip(*scores, strict=True)]
        return WithheldSkill(names, *columns)

    def _score(
        self, tensor: FloatArray, estimate: GroupEstimate, name: str, valid: BoolArray
    ) -> tuple[FloatArray, FloatArray]:
        true = estimate.flux[name][None]
        predicted = down_gradient(tensor, estimate.gradient[name][None])
        weights = np.where(valid, self.area, 0.0)
        spread = np.stack(
            [divergence(flux[0, 0], flux[0, 1], self.geometry) for flux in (predicted, true)]
        )
        of_flux = flux_skill(predicted, true, weights)
        of_divergence = divergence_skill(spread[0][None], spread[1][None], weights)
        # A flux that does not vary has a divergence of rounding errors only.
        return of_flux, np.where(np.isnan(of_flux), np.nan, of_divergence)

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
