"""Lengths, speeds and the scale the transport tensor is learned over."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

LEAST_BETA = 1e-12
"""Beta below which the Rhines length no longer grows, m-1 s-1."""
LONGEST_RHINES_LENGTH = 500e3
LEAST_SCALE = 10.0
"""Least scale of the tensor, m2 s-1, where there is hardly any eddy energy."""


def planetary_beta(xp: Any, inputs: Mapping[str, Any]) -> Any:
    """Size of the gradient of the Coriolis parameter, m-1 s-1.

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    inputs : mapping of str to array

    Returns
    -------
    array
    """
    along_x, along_y = inputs["planetary_beta_x"], inputs["planetary_beta_y"]
    return xp.sqrt(along_x * along_x + along_y * along_y)


def eddy_speed(xp: Any, energy: Any) -> Any:
    """Eddy speed ``sqrt(2 EKE)``, m s-1.

    Parameters
    ----------
    xp : namespace
    energy : array, m2 s-2

    Returns
    -------
    array
    """
    return xp.sqrt(2.0 * xp.maximum(energy, 0.0))


def rhines_length(xp: Any, inputs: Mapping[str, Any]) -> Any:
    """Rhines length ``sqrt(U/beta)`` of the column's eddy speed.

    Parameters
    ----------
    xp : namespace
    inputs : mapping of str to array
        With ``eddy_kinetic_energy_column`` in m2 s-2 and planetary beta in m-1 s-1.

    Returns
    -------
    array, m
        At most 500 km, which also stands where beta vanishes.

    Notes
    -----
    Rhines 1975, J. Fluid Mech. 69, 417-443.
    """
    speed = eddy_speed(xp, inputs["eddy_kinetic_energy_column"])
    return rhines_length_of(xp, speed, planetary_beta(xp, inputs))


def rhines_length_of(xp: Any, speed: Any, beta: Any) -> Any:
    """Rhines length ``sqrt(U/beta)`` of a speed.

    Parameters
    ----------
    xp : namespace
    speed : array, m s-1
    beta : array, m-1 s-1

    Returns
    -------
    array, m
        At most 500 km, which also stands where beta vanishes.
    """
    return xp.minimum(xp.sqrt(speed / xp.maximum(beta, LEAST_BETA)), LONGEST_RHINES_LENGTH)


def tensor_scale(xp: Any, inputs: Mapping[str, Any], family: str) -> Any:
    """Scale the transport tensor is divided by in training and multiplied by after it.

    Parameters
    ----------
    xp : namespace
    inputs : mapping of str to array
    family : {"mean-field", "local-energy"}

    Returns
    -------
    array, m2 s-1
        1 for closures of the mean field, whose tensor is learned as it is; eddy speed
        times Rhines length where the host gives eddy energy.
    """
    if family == "mean-field":
        return inputs["layer_index"] * 0.0 + 1.0
    speed = eddy_speed(xp, inputs["eddy_kinetic_energy"])
    return xp.maximum(speed * rhines_length(xp, inputs), LEAST_SCALE)
