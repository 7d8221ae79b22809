"""Stratification and vertical modes from layer thicknesses and reduced gravities."""

from __future__ import annotations

from typing import NamedTuple

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


class VerticalModes(NamedTuple):
    """Baroclinic modes of every column.

    Attributes
    ----------
    first_speed, second_speed : ndarray, shape (y, x), m s-1
        Speeds of the long gravity waves; zero where the column has too few interfaces.
    amplitude : ndarray, shape (layer, y, x), 1
        Pressure of the first mode: positive in the top layer, of unit mean square over
        the column; zero where the column has no interface.
    """

    first_speed: FloatArray
    second_speed: FloatArray
    amplitude: FloatArray


def _interface_matrix(state: MeanState, gravity: FloatArray) -> FloatArray:
    """Return ``A = G^-1/2 E H^-1 E^T G^-1/2`` of every column."""
    interfaces, rows, columns = state.interface_wet.shape
    wet = state.interface_wet
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
    return matrix


def vertical_modes(state: MeanState) -> VerticalModes:
    """Compute the first baroclinic modes of every column.

    The layered form of ``d/dz (f2/N2 dpsi/dz) = -psi f2/c2``: with the interface matrix
    ``A = G^-1/2 E H^-1 E^T G^-1/2`` (``E`` the difference of adjacent layers, ``H``
    thicknesses, ``G`` reduced gravities) the eigenvalues are ``1/c2``, and an eigenvector
    ``y`` belongs to the pressure ``H^-1 E^T G^-1/2 y``.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    VerticalModes

    Notes
    -----
    Gill 1982, Atmosphere-Ocean Dynamics, section 6.11 (from memory). For two layers
    ``c2 = g' H1 H2 / (H1 + H2)`` and the pressures are in the ratio ``-H2/H1``.
    """
    interfaces, rows, columns = state.interface_wet.shape
    amplitude = np.zeros(state.x_velocity.shape)
    if interfaces == 0:
        return VerticalModes(np.zeros((rows, columns)), np.zeros((rows, columns)), amplitude)
    gravity = stable_reduced_gravity(state)
    values, vectors = np.linalg.eigh(_interface_matrix(state, gravity))
    count = state.interface_wet.sum(axis=0)

    def speed(number: int) -> FloatArray:
        there = count > number
        if number >= interfaces:
            return np.zeros((rows, columns))
        return np.where(there, 1.0 / np.sqrt(np.where(there, values[..., number], 1.0)), 0.0)

    displacement = np.moveaxis(vectors[..., 0], -1, 0) / np.sqrt(gravity)
    displacement = np.where(state.interface_wet, displacement, 0.0)
    amplitude[:-1] += displacement
    amplitude[1:] -= displacement
    thickness = np.where(state.geometry.mask, state.thickness, 0.0)
    amplitude = np.where(state.geometry.mask, amplitude / state.thickness, 0.0)
    mean_square = (thickness * amplitude**2).sum(axis=0) / np.maximum(thickness.sum(axis=0), 1.0)
    scale = np.where(amplitude[0] < 0.0, -1.0, 1.0) / np.sqrt(
        np.where(mean_square > 0.0, mean_square, 1.0)
    )
    return VerticalModes(speed(0), speed(1), amplitude * scale)


def gravity_wave_speed(state: MeanState) -> FloatArray:
    """Speed of the first baroclinic long gravity wave, as ``vertical_modes`` has it.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (y, x), m s-1
        Zero where the column has no interface.
    """
    there = np.any(state.interface_wet, axis=0)
    if not len(state.interface_wet):
        return np.zeros(there.shape)
    matrix = _interface_matrix(state, stable_reduced_gravity(state))
    smallest = np.linalg.eigvalsh(matrix)[..., 0]
    return np.where(there, 1.0 / np.sqrt(np.where(there, smallest, 1.0)), 0.0)


def wkb_speed(state: MeanState) -> FloatArray:
    """Speed of the first baroclinic mode for slowly varying N, ``int N dz / pi``.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (y, x), m s-1
        N above the uppermost and below the lowest interface is that of the interface;
        zero where the column has none.

    Notes
    -----
    Chelton et al. 1998, J. Phys. Oceanogr. 28, 433-460.
    """
    wet = state.interface_wet
    frequency = np.sqrt(stable_reduced_gravity(state) / state.interface_spacing)
    part = np.where(wet, state.interface_spacing, 0.0)
    if len(wet):
        part[0] += np.where(wet[0], 0.5 * state.thickness[0], 0.0)
        last = wet.copy()
        last[:-1] &= ~wet[1:]
        part += np.where(last, 0.5 * state.thickness[1:], 0.0)
    return np.asarray((part * np.where(wet, frequency, 0.0)).sum(axis=0) / np.pi)


def radius_of_speed(state: MeanState, speed: FloatArray) -> FloatArray:
    """Deformation radius that belongs to the speed of a mode.

    ``c/|f|``, or ``sqrt(c/(2 beta))`` where that is smaller, which is so within about
    five degrees of the equator (Chelton et al. 1998, J. Phys. Oceanogr. 28, 433-460).

    Parameters
    ----------
    state : MeanState
    speed : ndarray, shape (y, x), m s-1

    Returns
    -------
    ndarray, shape (y, x), m
        Between 1 and 500 km; 1 km where the speed is zero.
    """
    beta = np.hypot(state.planetary_beta_x, state.planetary_beta_y)
    with np.errstate(divide="ignore", invalid="ignore"):
        rotational = speed / np.abs(state.coriolis_parameter)
        equatorial = np.sqrt(speed / (2.0 * beta))
    radius = np.fmin(rotational, equatorial)
    radius = np.where(np.isfinite(radius), radius, LONGEST_RADIUS)
    return np.clip(np.where(speed > 0.0, radius, SHORTEST_RADIUS), SHORTEST_RADIUS, LONGEST_RADIUS)


def deformation_radius(state: MeanState) -> FloatArray:
    """First baroclinic deformation radius.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (y, x), m
        Between 1 and 500 km; 1 km where the column has no interface.
    """
    return radius_of_speed(state, gravity_wave_speed(state))


def interface_mean(state: MeanState, values: FloatArray) -> FloatArray:
    """Mean of interface values over the interfaces of each layer.

    Parameters
    ----------
    state : MeanState
    values : ndarray, shape (layer - 1, y, x)

    Returns
    -------
    ndarray, shape (layer, y, x)
        Zero where a layer has no interface.
    """
    wet = state.interface_wet.astype(np.float64)
    total, count = np.zeros(state.x_velocity.shape), np.zeros(state.x_velocity.shape)
    total[:-1] += values * wet
    total[1:] += values * wet
    count[:-1] += wet
    count[1:] += wet
    return total / np.maximum(count, 1.0)


def buoyancy_frequency_squared(state: MeanState) -> FloatArray:
    """Square of the buoyancy frequency, mean over the interfaces of each layer.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (layer, y, x), s-2
        At least 1e-8, which also stands where a layer has no interface.
    """
    squared = stable_reduced_gravity(state) / state.interface_spacing
    return np.maximum(interface_mean(state, squared), LEAST_BUOYANCY_FREQUENCY_SQUARED)
