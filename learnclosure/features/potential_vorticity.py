"""Gradient of quasi-geostrophic potential vorticity in layers."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import gradient
from learnclosure.features.mean_state import MeanState
from learnclosure.features.stratification import stable_reduced_gravity

FloatArray = npt.NDArray[np.float64]


def bottom_layer(state: MeanState) -> npt.NDArray[np.bool_]:
    """Tell which cell of each column is the lowest that is sea.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    ndarray of bool, shape (layer, y, x)
    """
    mask = state.geometry.mask
    below = np.zeros_like(mask)
    below[:-1] = mask[1:]
    return np.asarray(mask & ~below)


def depth_gradient(state: MeanState) -> tuple[FloatArray, FloatArray]:
    """Gradient of the depth of the sea floor.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    along_x, along_y : ndarray, shape (1, y, x), 1
    """
    geometry = state.geometry
    surface = type(geometry)(
        geometry.dx,
        geometry.dy,
        np.any(geometry.mask, axis=0, keepdims=True),
        geometry.periodic_x,
        geometry.periodic_y,
    )
    return gradient(state.sea_floor_depth[None], surface)


def topographic_beta(state: MeanState) -> tuple[FloatArray, FloatArray]:
    """Topographic beta vector of the whole column, ``-(f/D) grad D``.

    Parameters
    ----------
    state : MeanState

    Returns
    -------
    along_x, along_y : ndarray, shape (y, x), m-1 s-1
        Adds to planetary beta where the sea shoals poleward.

    Notes
    -----
    Rhines 1969, J. Fluid Mech. 37, 161-189 (from memory).
    """
    along_x, along_y = depth_gradient(state)
    factor = -state.coriolis_parameter / np.maximum(state.sea_floor_depth, 1.0)
    return factor * along_x[0], factor * along_y[0]


def potential_vorticity_gradient(
    state: MeanState, vorticity: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Gradient of layered quasi-geostrophic potential vorticity.

    ``grad q_k = grad zeta_k + grad f + (f2/H_k) sum_j (grad psi_j - grad psi_k)/g'_kj``
    over the adjacent layers j, with ``grad psi = (v, -u)``; the lowest layer gains
    ``-(f/H_k) grad D`` from topography. For two layers along y this is
    ``beta + F1 (U1 - U2)`` above and ``beta - F2 (U1 - U2)`` below.

    Parameters
    ----------
    state : MeanState
    vorticity : ndarray, shape (layer, y, x), s-1
        Relative vorticity.

    Returns
    -------
    along_x, along_y : ndarray, shape (layer, y, x), m-1 s-1

    Notes
    -----
    Pedlosky 1987, Geophysical Fluid Dynamics, section 6.16 (from memory).
    """
    along_x, along_y = gradient(vorticity, state.geometry)
    along_x = along_x + state.planetary_beta_x
    along_y = along_y + state.planetary_beta_y
    coriolis = state.coriolis_parameter
    wet = state.interface_wet
    coupling = np.where(wet, coriolis * coriolis / stable_reduced_gravity(state), 0.0)
    eastward = coupling * (state.x_velocity[:-1] - state.x_velocity[1:])
    northward = coupling * (state.y_velocity[:-1] - state.y_velocity[1:])
    thickness = state.thickness
    # (v_below - v)/g' above and (v_above - v)/g' below the interface; the same with -u.
    along_x[:-1] -= northward / thickness[:-1]
    along_x[1:] += northward / thickness[1:]
    along_y[:-1] += eastward / thickness[:-1]
    along_y[1:] -= eastward / thickness[1:]
    slope_x, slope_y = depth_gradient(state)
    bottom = np.where(bottom_layer(state), -coriolis / thickness, 0.0)
    mask = state.geometry.mask
    return (
        np.where(mask, along_x + bottom * slope_x, 0.0),
        np.where(mask, along_y + bottom * slope_y, 0.0),
    )
