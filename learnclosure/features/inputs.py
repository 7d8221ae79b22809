"""The physical inputs of a closure at every point, in SI units.

Everything that needs neighbours, the column or the whole section is done here, by
whoever runs a closure; what follows from these values at a point alone is part of the
closure itself.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import gradient
from learnclosure.features.instability import charney_green_number, eady_growth_rate
from learnclosure.features.jet import find_jet
from learnclosure.features.mean_state import MeanState
from learnclosure.features.potential_vorticity import (
    potential_vorticity_gradient,
    topographic_beta,
)
from learnclosure.features.stratification import deformation_radius, unstratified

FloatArray = npt.NDArray[np.float64]

LEAST_EDDY_ENERGY = 1e-8
"""Eddy kinetic energy below which its logarithm is no longer followed, m2 s-2."""


def layer_shear(state: MeanState) -> tuple[FloatArray, FloatArray]:
    """Difference of the mean flow across the interfaces of a layer, upper minus lower.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    along_x, along_y : ndarray, shape (layer, y, x), m s-1
        Mean over the layer's interfaces; zero where it has none.
    """
    wet = state.interface_wet.astype(np.float64)
    count = np.zeros(state.x_velocity.shape)
    count[:-1] += wet
    count[1:] += wet

    def mean_difference(velocity: FloatArray) -> FloatArray:
        difference = (velocity[:-1] - velocity[1:]) * wet
        total = np.zeros(velocity.shape)
        total[:-1] += difference
        total[1:] += difference
        return total / np.maximum(count, 1.0)

    return mean_difference(state.x_velocity), mean_difference(state.y_velocity)


def _column_energy(state: MeanState, energy: FloatArray) -> FloatArray:
    weight = np.where(state.geometry.mask, state.layer_thickness, 0.0)
    total = weight.sum(axis=0)
    return np.asarray((weight * energy).sum(axis=0) / np.where(total > 0.0, total, 1.0))


def _energy_inputs(state: MeanState, energy: FloatArray) -> dict[str, FloatArray]:
    energy = np.maximum(np.where(state.geometry.mask, energy, 0.0), 0.0)
    gradient_x, gradient_y = gradient(np.log(np.maximum(energy, LEAST_EDDY_ENERGY)), state.geometry)
    return {
        "eddy_kinetic_energy": energy,
        "eddy_kinetic_energy_column": np.broadcast_to(
            _column_energy(state, energy), energy.shape
        ).copy(),
        "eddy_energy_gradient_x": gradient_x,
        "eddy_energy_gradient_y": gradient_y,
    }


def compute_inputs(state: MeanState) -> dict[str, FloatArray]:
    """Compute every input that the mean state allows.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    dict of str to ndarray, shape (layer, y, x)
        Named and in units as the rows of ``quantities.INPUTS``; zero on land. Those that
        need eddy energy are there only if the state has it. All values are finite.
    """
    mask = state.geometry.mask
    shape = mask.shape
    xx, xy = gradient(state.x_velocity, state.geometry)
    yx, yy = gradient(state.y_velocity, state.geometry)
    pv_x, pv_y = potential_vorticity_gradient(state, yx - xy)
    shear_x, shear_y = layer_shear(state)
    topographic_x, topographic_y = topographic_beta(state)
    jet = find_jet(state)
    thickness = np.where(mask, state.layer_thickness, 0.0)
    middle = np.cumsum(thickness, axis=0) - 0.5 * thickness
    column = np.maximum(thickness.sum(axis=0), 1.0)
    index = np.arange(shape[0], dtype=np.float64)[:, None, None]
    fields: dict[str, FloatArray] = {
        "x_velocity": state.x_velocity,
        "y_velocity": state.y_velocity,
        "velocity_gradient_xx": xx,
        "velocity_gradient_xy": xy,
        "velocity_gradient_yx": yx,
        "velocity_gradient_yy": yy,
        "shear_x": shear_x,
        "shear_y": shear_y,
        "pv_gradient_x": pv_x,
        "pv_gradient_y": pv_y,
        "planetary_beta_x": state.planetary_beta_x,
        "planetary_beta_y": state.planetary_beta_y,
        "topographic_beta_x": topographic_x,
        "topographic_beta_y": topographic_y,
        "coriolis_parameter": state.coriolis_parameter,
        "deformation_radius": deformation_radius(state),
        "eady_growth_rate": eady_growth_rate(state),
        "charney_green_number": charney_green_number(state),
        "jet_distance": jet.distance,
        "jet_speed": jet.speed,
        "jet_width": jet.width,
        "layer_index": index,
        "depth_share": middle / column,
    }
    if state.eddy_kinetic_energy is not None:
        fields |= _energy_inputs(state, state.eddy_kinetic_energy)
    return {name: np.where(mask, values, 0.0) for name, values in fields.items()}


def input_flags(state: MeanState) -> dict[str, npt.NDArray[np.bool_]]:
    """Tell where an input is a stand-in because the quantity is undefined.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    dict of str to ndarray of bool, shape (layer, y, x)
        ``no_stratification``, ``no_jet``, ``no_rotation`` and ``frame_undefined``.
    """
    mask = state.geometry.mask
    xy = gradient(state.x_velocity, state.geometry)[1]
    yx = gradient(state.y_velocity, state.geometry)[0]
    pv_x, pv_y = potential_vorticity_gradient(state, yx - xy)
    surface = {
        "no_stratification": unstratified(state),
        "no_jet": ~find_jet(state).found,
        "no_rotation": state.coriolis_parameter == 0.0,
    }
    flags = {name: mask & flag for name, flag in surface.items()}
    flags["frame_undefined"] = mask & (np.hypot(pv_x, pv_y) == 0.0)
    return flags
