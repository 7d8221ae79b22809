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
