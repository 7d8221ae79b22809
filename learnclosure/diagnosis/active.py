"""What eddies do to the flow itself, next to what they do to passive tracers.

The GM coefficient (Gent and McWilliams 1990, J. Phys. Oceanogr. 20, 150-155) is the
diffusivity of interface height, or of buoyancy on levels; the Redi coefficient (Redi
1982, J. Phys. Oceanogr. 12, 1154-1158) that of passive tracers. Both are fits of one
scalar by least squares, so that their ratio compares like with like. Whether the tensor
of passive tracers carries potential vorticity is asked layer by layer.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.estimate import LEAST_MEMBERS_FOR_JACKKNIFE, Estimator
from learnclosure.diagnosis.moments import GroupMoments, Moments
from learnclosure.diagnosis.sampling import (
    jackknife_standard_error,
    spearman_brown,
    weighted_correlation,
)
from learnclosure.diagnosis.skill import LEAST_VARIATION, divergence_skill, flux_skill
from learnclosure.diagnosis.surfaces import Surfaces, full_gradient
from learnclosure.diagnosis.tensor import down_gradient, scalar_diffusivity
from learnclosure.ensemble.grid import divergence

FloatArray = npt.NDArray[np.float64]

LEAST_SIGNAL = 3.0
"""A mean gradient counts where it exceeds its standard error this many times."""

LEAST_RATIO_SIGNAL = 2.0
"""The same for a GM coefficient something is divided by."""

CARRIES = 0.5
"""Least coefficient of determination at which a tensor is said to carry a flux."""

CARRIES_WORD, CARRIES_NOT_WORD, NOT_KNOWN_WORD = "carries", "does not carry", "cannot be told"


def down_gradient_coefficient(
    flux: FloatArray, gradient: FloatArray, area: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Fit ``J = -k g`` by least squares, in every cell and over every layer.

    Parameters
    ----------
    flux, gradient : ndarray, shape (2, layer, y, x)
    area : ndarray, shape (layer, y, x), m2
        Zero on land.

    Returns
    -------
    cells : ndarray, shape (layer, y, x), m2 s-1
        ``-J.g/|g|^2``; NaN where there is no gradient or no sea.
    layers : ndarray, shape (layer,), m2 s-1
        The same of sums over the layer: with it the layer as a whole loses as much mean
        energy as with the flux itself, whatever circulates in it. NaN without gradient.
    """
    down = np.where(area > 0.0, -(flux * gradient).sum(axis=0), 0.0)
    square = np.where(area > 0.0, (gradient**2).sum(axis=0), 0.0)
    cells = np.where(square > 0.0, down / np.where(square > 0.0, square, 1.0), np.nan)
    total, size = (area * down).sum(axis=(-2, -1)), (area * square).sum(axis=(-2, -1))
    return cells, np.where(size > 0.0, total / np.where(size > 0.0, size, 1.0), np.nan)


@dataclass(frozen=True)
class Coefficients:
    """GM and Redi coefficients on surfaces, with standard errors.

    Attributes
    ----------
    gm, redi : ndarray, shape (surface, y, x), m2 s-1
        NaN where mean gradients do not stand out from their sampling error.
    gm_error, redi_error : ndarray, shape (surface, y, x), m2 s-1
        By leaving one member out; NaN with fewer than three members.
    ratio : ndarray, shape (surface, y, x), 1
        Redi over GM where GM stands out from its error.
    gm_layer, redi_layer, ratio_layer : ndarray, shape (surface,)
        Of the whole surface.
    gm_layer_error, redi_layer_error, ratio_layer_error : ndarray, shape (surface,)
    """

    gm: FloatArray
    gm_error: FloatArray
    redi: FloatArray
    redi_error: FloatArray
    ratio: FloatArray
    gm_layer: FloatArray
    gm_layer_error: FloatArray
    redi_layer: FloatArray
    redi_layer_error: FloatArray
    ratio_layer: FloatArray
    ratio_layer_error: FloatArray


class CoefficientEstimator:
    """Estimates GM and Redi coefficients and their errors.

    Parameters
    ----------
    surfaces : Surfaces
    estimator : Estimator
        Of the passive tracers.
    """

    def __init__(self, surfaces: Surfaces, estimator: Estimator) -> None:
        self.surfaces = surfaces
        self.estimator = estimator

    def sample(
        self, means: dict[str, FloatArray], fluxes: dict[str, FloatArray]
    ) -> dict[str, FloatArray]:
        """Fit all coefficients to one sample of means and fluxes.

        Parameters
        ----------
        means : dict of str to ndarray, shape (layer, y, x)
        fluxes : dict of str to ndarray, shape (2, layer, y, x)

        Returns
        -------
        dict of str to ndarray
            ``slope`` (2, surface, y, x), ``gm`` and ``redi`` (surface, y, x), and
            ``gm_layer``, ``redi_layer`` and ``ratio_layer`` (surface,).
        """
        surfaces, estimator = self.surfaces, self.estimator
        slope = surfaces.gradient(means)
        gm, gm_layer = down_gradient_coefficient(surfaces.flux(fluxes), slope, surfaces.area)
        passive = {name: means[name] for name in estimator.tracers}
        equations = estimator.equations(fluxes, estimator.gradients(passive))
        both = [np.trace(part, axis1=-2, axis2=-1) for part in (equations.B, equations.M)]
        sums = [(estimator.area * part).sum(axis=(-2, -1)) for part in both]
        redi_layer = sums[0] / np.where(sums[1] > 0.0, sums[1], np.nan)
        redi_layer = surfaces.between(redi_layer[:, None, None])[:, 0, 0]
        return {
            "slope": slope,
            "gm": gm,
            "redi": surfaces.between(scalar_diffusivity(equations)),
            "gm_layer": gm_layer,
            "redi_layer": redi_layer,
            "ratio_layer": redi_layer / gm_layer,
        }

    def estimate(self, moments: Moments) -> Coefficients:
        """Estimate the coefficients of an ensemble.

        Parameters
        ----------
        moments : Moments

        Returns
        -------
        Coefficients
        """
        whole = self.sample(moments.whole.mean, moments.whole.flux)
        error = self._errors(moments, whole)
        size = np.sqrt((whole["slope"] ** 2).sum(axis=0))
        noise = np.sqrt((np.nan_to_num(error["slope"]) ** 2).sum(axis=0))
        known = self.surfaces.geometry.mask & (size > LEAST_SIGNAL * noise)
        gm, gm_error = (np.where(known, values["gm"], np.nan) for values in (whole, error))
        wet = self.surfaces.geometry.mask
        redi, redi_error = (np.where(wet, values["redi"], np.nan) for values in (whole, error))
        sure = gm > LEAST_RATIO_SIGNAL * np.nan_to_num(gm_error)
        return Coefficients(
            gm, gm_error, redi, redi_error,
            ratio=np.where(sure, redi / np.where(sure, gm, 1.0), np.nan),
            gm_layer=whole["gm_layer"], gm_layer_error=error["gm_layer"],
            redi_layer=whole["redi_layer"], redi_layer_error=error["redi_layer"],
            ratio_layer=whole["ratio_layer"], ratio_layer_error=error["ratio_layer"],
        )  # fmt: skip

    def _errors(self, moments: Moments, whole: dict[str, FloatArray]) -> dict[str, FloatArray]:
        members = len(next(iter(moments.member_product.values())))
        if members < LEAST_MEMBERS_FOR_JACKKNIFE:
            return {name: np.full_like(values, np.nan) for name, values in whole.items()}
        left_out = [self.sample(*moments.without_member(member)) for member in range(members)]
        return {
            name: jackknife_standard_error(np.stack([sample[name] for sample in left_out]))
            for name in whole
        }


@dataclass(frozen=True)
class CarriedFlux:
    """The eddy flux of potential vorticity and what the passive tensor makes of it.

    Attributes
    ----------
    flux, gradient, reconstructed : ndarray, shape (2, layer, y, x)
    flux_skill, divergence_skill : ndarray, shape (layer,)
        Coefficients of determination.
    flux_reliability, divergence_reliability : ndarray, shape (layer,)
        Split-half reliability of what is reconstructed; NaN with fewer than four members.
    """

    flux: FloatArray
    gradient: FloatArray
    reconstructed: FloatArray
    flux_skill: FloatArray
    divergence_skill: FloatArray
    flux_reliability: FloatArray
    divergence_reliability: FloatArray

    @property
    def flux_verdicts(self) -> tuple[str, ...]:
        """Verdict on the flux, layer by layer."""
        return verdicts(self.flux_skill, self.flux_reliability)

    @property
    def divergence_verdicts(self) -> tuple[str, ...]:
        """Verdict on its divergence, layer by layer."""
        return verdicts(self.divergence_skill, self.divergence_reliability)


def verdicts(skill: FloatArray, reliability: FloatArray) -> tuple[str, ...]:
    """Say whether a tensor carries a flux.

    Parameters
    ----------
    skill : ndarray, shape (layer,)
        Coefficients of determination.
    reliability : ndarray, shape (layer,)
        Of the flux itself; NaN if not known.

    Returns
    -------
    tuple of str
        ``carries`` from a skill of ``CARRIES`` on; below, ``does not carry``, or ``cannot
        be told`` where the flux itself is less reliable than that.

    Examples
    --------
    >>> import numpy as np
    >>> verdicts(np.array([0.8, 0.1, 0.1]), np.array([0.9, 0.9, 0.3]))
    ('carries', 'does not carry', 'cannot be told')
    """
    words = []
    for one, ceiling in zip(skill, reliability, strict=True):
        if one >= CARRIES:
            words.append(CARRIES_WORD)
        elif ceiling < CARRIES or not np.isfinite(one):
            words.append(NOT_KNOWN_WORD)
        else:
            words.append(CARRIES_NOT_WORD)
    return tuple(words)


def carried_potential_vorticity(
    moments: Moments, estimator: Estimator, tensor: FloatArray, left_out: FloatArray
) -> CarriedFlux:
    """Reconstruct the eddy flux of potential vorticity as ``-K grad Q``.

    Parameters
    ----------
    moments : Moments
    estimator : Estimator
    tensor : ndarray, shape (layer, y, x, 2, 2), m2 s-1
        Of passive tracers; cells that are not finite do not count.
    left_out : ndarray, shape (2, layer)
        Uniform gradient that the values leave out.

    Returns
    -------
    CarriedFlux
    """
    name, geometry = "potential_vorticity", estimator.geometry
    known = np.isfinite(tensor).all(axis=(-2, -1))
    weights = np.where(known, estimator.area, 0.0)
    flux = moments.whole.flux[name]
    slope = full_gradient(moments.whole.mean[name], geometry, left_out)
    carried = down_gradient(tensor, slope[None])
    spread = [divergence(part[0], part[1], geometry) for part in (carried[0], flux)]

    def reliability(of: str) -> FloatArray:
        if not moments.halves:
            return np.full(len(flux[0]), np.nan)
        fluxes = [half.flux[name] for half in moments.halves]
        pair = [
            part if of == "flux" else divergence(part[0], part[1], geometry)[None]
            for part in fluxes
        ]
        found = spearman_brown(weighted_correlation(pair[0], pair[1], weights))
        return np.asarray(found.mean(axis=0))

    return CarriedFlux(
        flux=flux,
        gradient=slope,
        reconstructed=carried[0],
        flux_skill=flux_skill(carried, flux[None], weights),
        divergence_skill=divergence_skill(spread[0][None], spread[1][None], weights),
        flux_reliability=reliability("flux"),
        divergence_reliability=reliability("divergence"),
    )


def vary(moments: GroupMoments, name: str) -> bool:
    """Tell whether an active field differs between members at all.

    Parameters
    ----------
    moments : GroupMoments
    name : str

    Returns
    -------
    bool
    """
    rounding = (LEAST_VARIATION * moments.mean[name]) ** 2
    return bool((moments.covariance[name, name] > rounding).any())
