"""Where eddies take their energy from, and the bound their fluxes cannot pass.

All quantities are per unit mass. Conversions are positive where the eddies gain energy:
baroclinic from the potential energy of the mean state, barotropic from its kinetic energy
(Lorenz 1955, Tellus 7, 157-167; Harrison and Robinson 1978, Dyn. Atmos. Oceans 2, 185-210;
from memory). They use the time mean state; what eddies exchange with its slow changes is
not in them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.moments import GroupMoments
from learnclosure.diagnosis.surfaces import Surfaces, neighbours_mean
from learnclosure.ensemble.grid import Geometry, gradient

FloatArray = npt.NDArray[np.float64]

WEAKEST_STRATIFICATION = 1e-8
"""Squared buoyancy frequency, s-2, below which potential energy is not given."""

ROUNDING = 1e-12
"""Relative excess over the bound that float64 sums may show."""


@dataclass(frozen=True)
class Energetics:
    """Energies and conversions of one region.

    Attributes
    ----------
    potential_energy : ndarray, shape (surface, y, x), m2 s-2
        Eddy available potential energy, ``N^2 <eta'^2>/2`` or ``<b'^2>/(2 N^2)``.
    baroclinic_conversion : ndarray, shape (surface, y, x), m2 s-3
        ``-N^2 <u' eta'>.grad eta`` or ``-<u' b'>.grad b / N^2``.
    barotropic_conversion : ndarray, shape (layer, y, x), m2 s-3
        ``-<u_i' u_j'> d_j U_i``.
    efficiency : ndarray, shape (surface,), 1
        Share of the energy bound the down-gradient flux reaches,
        ``sum |N J_down| / sum (K_e + P_e)`` with its sign; between -1 and 1 by the bound.
    """

    potential_energy: FloatArray
    baroclinic_conversion: FloatArray
    barotropic_conversion: FloatArray
    efficiency: FloatArray


@dataclass(frozen=True)
class BoundCheck:
    """How close eddy fluxes come to the bound their energies set.

    Attributes
    ----------
    largest_ratio : dict of str to float
        Largest flux over bound, by field; ``momentum`` for the anisotropic stress.
    violations : int
        Values above 1 by more than rounding: any is a fault of the moments.
    """

    largest_ratio: dict[str, float]
    violations: int


def barotropic_conversion(moments: GroupMoments, geometry: Geometry) -> FloatArray:
    """Energy eddies gain from the shear of the mean flow.

    Parameters
    ----------
    moments : GroupMoments
    geometry : Geometry

    Returns
    -------
    ndarray, shape (layer, y, x), m2 s-3
        Positive where the eddies gain.
    """
    stress = moments.covariance
    u_x, u_y = gradient(moments.mean["x_velocity"], geometry)
    v_x, v_y = gradient(moments.mean["y_velocity"], geometry)
    return -(
        stress["x_velocity", "x_velocity"] * u_x
        + stress["x_velocity", "y_velocity"] * (u_y + v_x)
        + stress["y_velocity", "y_velocity"] * v_y
    )


def interface_stratification(reduced_gravity: FloatArray, thickness: FloatArray) -> FloatArray:
    """Squared buoyancy frequency ``g'/h`` at interfaces, h the distance of layer centres.

    Parameters
    ----------
    reduced_gravity : ndarray, shape (layer - 1, y, x), m s-2
    thickness : ndarray, shape (layer, y, x), m

    Returns
    -------
    ndarray, shape (layer - 1, y, x), s-2
        NaN where there is no layer or it is below ``WEAKEST_STRATIFICATION``.
    """
    distance = neighbours_mean(thickness)
    known = distance > 0.0
    values = np.where(known, reduced_gravity / np.where(known, distance, 1.0), 0.0)
    return np.where(values > WEAKEST_STRATIFICATION, values, np.nan)


def level_stratification(
    buoyancy: FloatArray, thickness: FloatArray, geometry: Geometry
) -> FloatArray:
    """Squared buoyancy frequency at levels: centred, one-sided at both ends of a column.

    Parameters
    ----------
    buoyancy : ndarray, shape (level, y, x), m s-2
    thickness : ndarray, shape (level, y, x), m
    geometry : Geometry

    Returns
    -------
    ndarray, shape (level, y, x), s-2
        NaN on land and where it is below ``WEAKEST_STRATIFICATION``.
    """
    height = 0.5 * thickness - np.cumsum(thickness, axis=0)
    both = geometry.mask[:-1] & geometry.mask[1:]
    rise = np.where(both, buoyancy[:-1] - buoyancy[1:], 0.0)
    step = np.where(both, height[:-1] - height[1:], 0.0)
    nothing = np.zeros((1, *buoyancy.shape[1:]))
    total, gap = (
        np.concatenate([part, nothing]) + np.concatenate([nothing, part]) for part in (rise, step)
    )
    values = np.where(gap > 0.0, total / np.where(gap > 0.0, gap, 1.0), 0.0)
    return np.where(values > WEAKEST_STRATIFICATION, values, np.nan)


def energetics(
    moments: GroupMoments, geometry: Geometry, surfaces: Surfaces, stratification: FloatArray
) -> Energetics:
    """Compute energies and conversions.

    Parameters
    ----------
    moments : GroupMoments
    geometry : Geometry
        Of the layers.
    surfaces : Surfaces
    stratification : ndarray, shape (surface, y, x), s-2
        Squared buoyancy frequency, NaN where not known.

    Returns
    -------
    Energetics
    """
    name = surfaces.scalar
    variance = moments.covariance[name, name]
    slope, flux = surfaces.gradient(moments.mean), surfaces.flux(moments.flux)
    if surfaces.kind == "interface":
        variance, factor = variance[:-1], stratification
    else:
        factor = 1.0 / stratification
    wet = surfaces.geometry.mask
    potential = np.where(wet, 0.5 * factor * variance, np.nan)
    down = -(flux * slope).sum(axis=0)
    size = np.sqrt((slope**2).sum(axis=0))
    along = np.where(size > 0.0, down / np.where(size > 0.0, size, 1.0), 0.0)
    energy = surfaces.between(moments.eddy_kinetic_energy) + potential
    counted = np.where(np.isfinite(energy), surfaces.area, 0.0)
    gain = np.where(counted > 0.0, np.sqrt(factor) * along, 0.0)
    total = (counted * np.nan_to_num(energy)).sum(axis=(-2, -1))
    efficiency = (counted * gain).sum(axis=(-2, -1)) / np.where(total > 0.0, total, np.nan)
    return Energetics(
        potential_energy=potential,
        baroclinic_conversion=np.where(wet, factor * down, np.nan),
        barotropic_conversion=np.where(
            geometry.mask, barotropic_conversion(moments, geometry), np.nan
        ),
        efficiency=efficiency,
    )


def check_energy_bound(moments: GroupMoments, active: tuple[str, ...]) -> BoundCheck:
    """Check eddy fluxes against the bound that holds for any sample.

    With eddy kinetic energy K, ``|<u'c'>|^2 <= 2 K <c'^2>`` for every scalar c and
    ``(<v'^2 - u'^2>/2)^2 + <u'v'>^2 <= K^2`` for the momentum flux. For buoyancy the first
    is ``|<u'b'>| <= 2 N sqrt(K P) <= N (K + P)``.

    Parameters
    ----------
    moments : GroupMoments
    active : tuple of str
        Active fields, whose variances the moments hold.

    Returns
    -------
    BoundCheck

    Notes
    -----
    Marshall, Maddison and Berloff 2012, J. Phys. Oceanogr. 42, 539-557; the inequalities are
    Cauchy's and Schwarz's and hold exactly where all moments have the same weights.
    """
    stress, kinetic = moments.covariance, moments.eddy_kinetic_energy
    unlike = 0.5 * (stress["y_velocity", "y_velocity"] - stress["x_velocity", "x_velocity"])
    size = np.hypot(unlike, stress["x_velocity", "y_velocity"])
    pairs = {"momentum": (size, kinetic)}
    for name in active:
        variance = np.maximum(stress[name, name], 0.0)
        pairs[name] = (
            np.sqrt((moments.flux[name] ** 2).sum(axis=0)),
            np.sqrt(2.0 * kinetic * variance),
        )
    largest, violations = {}, 0
    for name, (flux, bound) in pairs.items():
        some = bound > 0.0
        ratio = flux[some] / bound[some]
        largest[name] = float(ratio.max(initial=0.0))
        violations += int(np.count_nonzero(ratio > 1.0 + ROUNDING))
        violations += int(np.count_nonzero(flux[~some] > 0.0))
    return BoundCheck(largest, violations)
