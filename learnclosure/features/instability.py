"""Scales of baroclinic instability of the mean column."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.features.mean_state import MeanState
from learnclosure.features.stratification import stable_reduced_gravity

FloatArray = npt.NDArray[np.float64]

EADY_FACTOR = 0.3098168352
"""Largest growth rate of the Eady problem over f U_z / N (Eady 1949, Tellus 1, 33-52)."""
LARGEST_CHARNEY_GREEN_NUMBER = 100.0
"""Stands in where there is no shear."""
LARGEST_CRITICALITY = 100.0
"""Stands in where there is shear but no beta."""


def _column_mean(values: FloatArray, state: MeanState) -> FloatArray:
    """Mean over the wet interfaces of each column, weighted by their spacing."""
    weight = np.where(state.interface_wet, state.interface_spacing, 0.0)
    total = weight.sum(axis=0)
    return np.asarray((weight * values).sum(axis=0) / np.where(total > 0.0, total, 1.0))


def _shear_and_frequency(state: MeanState) -> tuple[FloatArray, FloatArray]:
    """Shear of the mean flow in s-1 and N in s-1 at interfaces, shape (layer - 1, y, x)."""
    spacing = state.interface_spacing
    eastward = state.x_velocity[:-1] - state.x_velocity[1:]
    northward = state.y_velocity[:-1] - state.y_velocity[1:]
    frequency = np.sqrt(stable_reduced_gravity(state) / spacing)
    return np.hypot(eastward, northward) / spacing, frequency


def eady_growth_rate(state: MeanState) -> FloatArray:
    """Eady growth rate ``0.3098 |f| <|U_z|/N>``, averaged over the column.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (y, x), s-1
        Zero where the column has no interface.
    """
    shear, frequency = _shear_and_frequency(state)
    ratio = _column_mean(shear / frequency, state)
    return EADY_FACTOR * np.abs(state.coriolis_parameter) * ratio


def charney_green_number(state: MeanState) -> FloatArray:
    """Charney-Green number ``beta N2 H / (f2 U_z)`` of the column mean.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (y, x), 1
        At most 100, which also stands where there is no shear or no rotation.
    """
    shear, frequency = _shear_and_frequency(state)
    beta = np.hypot(state.planetary_beta_x, state.planetary_beta_y)
    above = beta * _column_mean(frequency * frequency, state) * state.sea_floor_depth
    below = state.coriolis_parameter * state.coriolis_parameter * _column_mean(shear, state)
    bounded = above < LARGEST_CHARNEY_GREEN_NUMBER * below
    number = above / np.where(bounded, below, 1.0)
    return np.where(bounded, number, LARGEST_CHARNEY_GREEN_NUMBER)


def phillips_criticality(state: MeanState) -> FloatArray:
    """Shear over the least unstable one by the criterion of Phillips, largest of the column.

    Across the interface of layers k and k + 1 beta and shear oppose each other if the
    eastward shear ``U_k - U_k+1`` is above ``beta/F_k+1`` or below ``-beta/F_k``, with
    ``F = f2/(g' H)``; eastward means with the gradient of f to the left.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray, shape (y, x), 1
        Between 0 and 100; 100 also for shear without beta.

    Notes
    -----
    Phillips 1954, Tellus 6, 273-286; Pedlosky 1987, Geophysical Fluid Dynamics, section
    7.11 (from memory).
    """
    beta = np.hypot(state.planetary_beta_x, state.planetary_beta_y)
    if not len(state.interface_wet):
        return np.zeros(beta.shape)
    safe = np.where(beta > 0.0, beta, 1.0)
    difference_x = state.x_velocity[:-1] - state.x_velocity[1:]
    difference_y = state.y_velocity[:-1] - state.y_velocity[1:]
    eastward = np.where(
        beta > 0.0,
        (difference_x * state.planetary_beta_y - difference_y * state.planetary_beta_x) / safe,
        np.hypot(difference_x, difference_y),
    )
    coupling = state.coriolis_parameter**2 / stable_reduced_gravity(state)
    opposed = np.maximum(
        eastward * coupling / state.thickness[1:], -eastward * coupling / state.thickness[:-1]
    )
    opposed = np.where(state.interface_wet, opposed, 0.0)
    bounded = opposed < LARGEST_CRITICALITY * beta
    unstable = np.where(opposed > 0.0, LARGEST_CRITICALITY, 0.0)
    return np.asarray(np.max(np.where(bounded, opposed / safe, unstable), axis=0))


def pv_gradient_reversal(state: MeanState, along_x: FloatArray, along_y: FloatArray) -> FloatArray:
    """Least cosine between the potential vorticity gradient of a layer and any other's.

    Parameters
    ----------
    state : MeanState
    along_x, along_y : ndarray, shape (layer, y, x), m-1 s-1
        Potential vorticity gradient.

    Returns
    -------
    ndarray, shape (layer, y, x), 1
        Below zero where the gradients oppose each other, without which a column is stable;
        1 where there is no other layer or no gradient.

    Notes
    -----
    Charney and Stern 1962, J. Atmos. Sci. 19, 159-172 (from memory).
    """
    size = np.hypot(along_x, along_y)
    there = (size > 0.0) & state.geometry.mask
    safe = np.where(there, size, 1.0)
    unit_x, unit_y = along_x / safe, along_y / safe
    least = np.ones(size.shape)
    for other in range(len(size)):
        cosine = unit_x * unit_x[other] + unit_y * unit_y[other]
        both = there & there[other]
        both[other] = False
        least = np.where(both, np.minimum(least, cosine), least)
    return np.clip(least, -1.0, 1.0)
