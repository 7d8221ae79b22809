"""Stratification and vertical modes from layer thicknesses and reduced gravities."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.features.mean_state import MeanState

FloatArray = npt.NDArray[np.float64]

LEAST_BUOYANCY_FREQUENCY_SQUARED = 1e-8
"""Neutral and unstable interfaces are given this N2, s-2."""
SHORTEST_RADIUS = 1e3
"""Least deformation radius, m; stands in where there is no stratification."""
LONGEST_RADIUS = 500e3
"""Largest deformation radius, m; stands in where there is no rotation at all."""


def stable_reduced_gravity(state: MeanState) -> FloatArray:
    """Reduced gravity with neutral and unstable interfaces raised to a least value.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (layer - 1, y, x), m s-2
    """
    least = LEAST_BUOYANCY_FREQUENCY_SQUARED * state.interface_spacing
    return np.maximum(state.reduced_gravity, least)


def unstratified(state: MeanState) -> npt.NDArray[np.bool_]:
    """Tell where no interface of the column is stably stratified.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray of bool, shape (y, x)
    """
    least = LEAST_BUOYANCY_FREQUENCY_SQUARED * state.interface_spacing
    stable = state.interface_wet & (state.reduced_gravity > least)
    return np.asarray(~np.any(stable, axis=0))


def gravity_wave_speed(state: MeanState) -> FloatArray:
    """Speed of the first baroclinic long gravity wave.

    The layered form of ``d/dz (f2/N2 dpsi/dz) = -psi f2/c2``: with the interface matrix
    ``A = G^-1/2 E H^-1 E^T G^-1/2`` (``E`` the difference of adjacent layers, ``H``
    thicknesses, ``G`` reduced gravities) the smallest eigenvalue is ``1/c2``.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (y, x), m s-1
        Zero where the column has no interface.

    Notes
    -----
    Gill 1982, Atmosphere-Ocean Dynamics, section 6.11 (from memory). For two layers
    ``c2 = g' H1 H2 / (H1 + H2)``.
    """
    interfaces, rows, columns = state.interface_wet.shape
    if interfaces == 0:
        return np.zeros((rows, columns))
    wet = state.interface_wet
    gravity = stable_reduced_gravity(state)
    inverse = 1.0 / state.thickness
    matrix = np.zeros((rows, columns, interfaces, interfaces))
    # A dry interface stands alone with an eigenvalue above any of the sea's.
    for k in range(interfaces):
        own = (inverse[k] + inverse[k + 1]) / gravity[k]
        matrix[..., k, k] = np.where(wet[k], own, np.inf)
    ceiling = 4.0 * np.max(np.where(np.isfinite(matrix), matrix, 0.0)) + 1.0
    matrix[~np.isfinite(matrix)] = ceiling
    for k in range(interfaces - 1):
        both = wet[k] & wet[k + 1]
        link = np.where(both, -inverse[k + 1] / np.sqrt(gravity[k] * gravity[k + 1]), 0.0)
        matrix[..., k, k + 1] = link
        matrix[..., k + 1, k] = link
    smallest = np.linalg.eigvalsh(matrix)[..., 0]
    any_wet = np.any(wet, axis=0)
    return np.where(any_wet, 1.0 / np.sqrt(np.where(any_wet, smallest, 1.0)), 0.0)


def deformation_radius(state: MeanState) -> FloatArray:
    """First baroclinic deformation radius.

    ``c/|f|``, or ``sqrt(c/(2 beta))`` where that is smaller, which is so within about
    five degrees of the equator (Chelton et al. 1998, J. Phys. Oceanogr. 28, 433-460).

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (y, x), m
        Between 1 and 500 km; 1 km where the column has no interface.
    """
    speed = gravity_wave_speed(state)
    beta = np.hypot(state.planetary_beta_x, state.planetary_beta_y)
    with np.errstate(divide="ignore", invalid="ignore"):
        rotational = speed / np.abs(state.coriolis_parameter)
        equatorial = np.sqrt(speed / (2.0 * beta))
    radius = np.fmin(rotational, equatorial)
    radius = np.where(np.isfinite(radius), radius, LONGEST_RADIUS)
    return np.clip(np.where(speed > 0.0, radius, SHORTEST_RADIUS), SHORTEST_RADIUS, LONGEST_RADIUS)
