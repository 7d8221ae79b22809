"""The physical inputs of a closure at every point, in SI units.

Everything that needs neighbours, the column or the whole section is done here, by
whoever runs a closure; what follows from these values at a point alone is part of the
closure itself.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import gradient
from learnclosure.features.beside_jet import place_beside_jets
from learnclosure.features.boundaries import land_distance
from learnclosure.features.frames import Frame, frame_axes
from learnclosure.features.instability import (
    charney_green_number,
    eady_growth_rate,
    phillips_criticality,
    pv_gradient_reversal,
)
from learnclosure.features.jet import find_jet
from learnclosure.features.mean_state import MeanState
from learnclosure.features.potential_vorticity import (
    depth_gradient,
    potential_vorticity_gradient,
    topographic_beta,
)
from learnclosure.features.stratification import (
    buoyancy_frequency_squared,
    interface_mean,
    radius_of_speed,
    unstratified,
    vertical_modes,
    wkb_speed,
)
from learnclosure.quantities import INPUTS

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
    return (
        interface_mean(state, state.x_velocity[:-1] - state.x_velocity[1:]),
        interface_mean(state, state.y_velocity[:-1] - state.y_velocity[1:]),
    )


def shear_rate(state: MeanState) -> tuple[FloatArray, FloatArray]:
    """Vertical derivative of the mean flow.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    along_x, along_y : ndarray, shape (layer, y, x), s-1
        Mean over the layer's interfaces; zero where it has none.
    """
    spacing = state.interface_spacing
    return (
        interface_mean(state, (state.x_velocity[:-1] - state.x_velocity[1:]) / spacing),
        interface_mean(state, (state.y_velocity[:-1] - state.y_velocity[1:]) / spacing),
    )


def _column_mean(state: MeanState, values: FloatArray) -> FloatArray:
    """Mean over the column weighted by thickness, the same in every layer."""
    weight = np.where(state.geometry.mask, state.layer_thickness, 0.0)
    total = weight.sum(axis=0)
    mean = (weight * values).sum(axis=0) / np.where(total > 0.0, total, 1.0)
    return np.broadcast_to(mean, values.shape).copy()


def _energy_inputs(state: MeanState, energy: FloatArray) -> dict[str, FloatArray]:
    energy = np.maximum(np.where(state.geometry.mask, energy, 0.0), 0.0)
    gradient_x, gradient_y = gradient(np.log(np.maximum(energy, LEAST_EDDY_ENERGY)), state.geometry)
    return {
        "eddy_kinetic_energy": energy,
        "eddy_kinetic_energy_column": _column_mean(state, energy),
        "eddy_energy_gradient_x": gradient_x,
        "eddy_energy_gradient_y": gradient_y,
    }


def _flow_inputs(state: MeanState) -> dict[str, FloatArray]:
    """Velocity, its gradients, and those of potential vorticity."""
    xx, xy = gradient(state.x_velocity, state.geometry)
    yx, yy = gradient(state.y_velocity, state.geometry)
    vorticity_x, vorticity_y = gradient(yx - xy, state.geometry)
    pv_x, pv_y = potential_vorticity_gradient(state, yx - xy)
    shear_x, shear_y = layer_shear(state)
    rate_x, rate_y = shear_rate(state)
    return {
        "x_velocity": state.x_velocity,
        "y_velocity": state.y_velocity,
        "velocity_gradient_xx": xx,
        "velocity_gradient_xy": xy,
        "velocity_gradient_yx": yx,
        "velocity_gradient_yy": yy,
        "shear_x": shear_x,
        "shear_y": shear_y,
        "shear_rate_x": rate_x,
        "shear_rate_y": rate_y,
        "column_velocity_x": _column_mean(state, state.x_velocity),
        "column_velocity_y": _column_mean(state, state.y_velocity),
        "pv_gradient_x": pv_x,
        "pv_gradient_y": pv_y,
        "pv_gradient_reversal": pv_gradient_reversal(state, pv_x, pv_y),
        "vorticity_gradient_x": vorticity_x,
        "vorticity_gradient_y": vorticity_y,
        "planetary_beta_x": state.planetary_beta_x,
        "planetary_beta_y": state.planetary_beta_y,
    }


def _column_inputs(state: MeanState) -> dict[str, FloatArray]:
    """Stratification, instability and position in the column."""
    modes = vertical_modes(state)
    second = radius_of_speed(state, modes.second_speed)
    thickness = np.where(state.geometry.mask, state.layer_thickness, 0.0)
    middle = np.cumsum(thickness, axis=0) - 0.5 * thickness
    column = np.maximum(thickness.sum(axis=0), 1.0)
    return {
        "coriolis_parameter": state.coriolis_parameter,
        "deformation_radius": radius_of_speed(state, modes.first_speed),
        "second_deformation_radius": np.where(modes.second_speed > 0.0, second, 0.0),
        "wkb_deformation_radius": radius_of_speed(state, wkb_speed(state)),
        "mode_amplitude": modes.amplitude,
        "buoyancy_frequency_squared": buoyancy_frequency_squared(state),
        "eady_growth_rate": eady_growth_rate(state),
        "charney_green_number": charney_green_number(state),
        "phillips_criticality": phillips_criticality(state),
        "layer_index": np.arange(len(thickness), dtype=np.float64)[:, None, None],
        "depth_share": middle / column,
        "thickness_share": thickness / column,
    }


def _place_inputs(state: MeanState, radius: FloatArray) -> dict[str, FloatArray]:
    """Topography, jets, coasts and resolution."""
    topographic_x, topographic_y = topographic_beta(state)
    slope_x, slope_y = depth_gradient(state)
    jet = find_jet(state)
    beside = place_beside_jets(state)
    return {
        "topographic_beta_x": topographic_x,
        "topographic_beta_y": topographic_y,
        "topographic_slope_x": slope_x[0],
        "topographic_slope_y": slope_y[0],
        "jet_distance": jet.distance,
        "jet_speed": jet.speed,
        "jet_width": jet.width,
        "axis_distance": beside.distance,
        "axis_speed": beside.speed,
        "axis_width": np.where(beside.found, beside.width, radius),
        "axis_direction_x": beside.axis_x,
        "axis_direction_y": beside.axis_y,
        "axis_presence": beside.found.astype(np.float64),
        "along_axis_distance": beside.along,
        "land_distance": land_distance(state.geometry),
        "cell_width": np.sqrt(state.geometry.area),
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
    column = _column_inputs(state)
    fields = _flow_inputs(state) | column | _place_inputs(state, column["deformation_radius"])
    if state.eddy_kinetic_energy is not None:
        fields |= _energy_inputs(state, state.eddy_kinetic_energy)
    mask = state.geometry.mask
    return {name: np.where(mask, fields[name], 0.0) for name in INPUTS if name in fields}


def input_flags(state: MeanState, frame: Frame = "pv-gradient") -> dict[str, npt.NDArray[np.bool_]]:
    """Tell where an input is a stand-in because the quantity is undefined.

    Parameters
    ----------
    state : MeanState
    frame : {"pv-gradient", "flow", "jet", "fixed"}, optional
        Local frame.

    Returns
    -------
    dict of str to ndarray of bool, shape (layer, y, x)
        ``no_stratification``, ``no_jet`` in the section through the cell, ``no_jet_axis``
        in the domain, ``no_rotation``, ``no_beta``, ``no_flow``, ``no_shear`` and
        ``frame_undefined``, where another direction stands in.
    """
    mask = state.geometry.mask
    inputs = compute_inputs(state)
    flags = {
        "no_stratification": unstratified(state),
        "no_jet": ~find_jet(state).found,
        "no_jet_axis": inputs["axis_presence"] == 0.0,
        "no_rotation": state.coriolis_parameter == 0.0,
        "no_beta": np.hypot(state.planetary_beta_x, state.planetary_beta_y) == 0.0,
        "no_flow": np.hypot(inputs["x_velocity"], inputs["y_velocity"]) == 0.0,
        "no_shear": np.hypot(inputs["shear_x"], inputs["shear_y"]) == 0.0,
        "frame_undefined": frame_axes(np, inputs, frame).own == 0.0,
    }
    return {name: mask & flag for name, flag in flags.items()}
