"""Between tensors along isoneutral surfaces and tensors in depth axes, both ways.

A 2x2 tensor ``K`` acts on gradients along isoneutral surfaces of slope
``S = -grad_h rho / rho_z``. In depth axes it is ``E K E^T`` with ``E^T = [1, S]`` in the
small-slope form, and ``Q K Q^T`` in full with Q the unit vectors of the surface that the
smallest rotation makes of the horizontal ones. A coefficient kappa of Gent and McWilliams
adds the antisymmetric ``kappa [[0, 0, -S_x], [0, 0, -S_y], [S_x, S_y, 0]]``.

Redi 1982, J. Phys. Oceanogr. 12, 1154-1158; Gent and McWilliams 1990, J. Phys. Oceanogr.
20, 150-155; Griffies 1998, J. Phys. Oceanogr. 28, 831-841.
"""

from __future__ import annotations

from typing import Literal, NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.tensor_3d import vertical_gradient
from learnclosure.ensemble.grid import Geometry, divergence, gradient
from learnclosure.ensemble.seawater import expansion_coefficients

FloatArray = npt.NDArray[np.float64]
Form = Literal["small-slope", "full"]

LEAST_SQUARED_FREQUENCY = 1e-8
"""Columns less stable than this, in s-2, have no slopes."""


class IsoneutralParts(NamedTuple):
    """What a tensor in depth axes is made of.

    Attributes
    ----------
    tensor : ndarray, shape (..., 2, 2), m2 s-1
        Tensor along isoneutral surfaces.
    skew_diffusivity : ndarray, shape (...), m2 s-1
        Coefficient of Gent and McWilliams; NaN where the slope is zero.
    departure : ndarray, shape (..., 3, 3), m2 s-1
        What of the tensor the two do not account for.
    """

    tensor: FloatArray
    skew_diffusivity: FloatArray
    departure: FloatArray


def slopes_from_buoyancy(
    buoyancy: FloatArray,
    thickness: FloatArray,
    geometry: Geometry,
    *,
    least: float = LEAST_SQUARED_FREQUENCY,
) -> FloatArray:
    """Slopes of surfaces of equal buoyancy, ``S = -grad_h b / b_z``.

    Parameters
    ----------
    buoyancy : ndarray, shape (layer, y, x), m s-2
        Mean on levels.
    thickness : ndarray, shape (layer, y, x), m
    geometry : Geometry
    least : float, optional
        Least squared buoyancy frequency, s-2.

    Returns
    -------
    ndarray, shape (2, layer, y, x), 1
        NaN on land and where the column is less stable than ``least``.
    """
    along_x, along_y = gradient(buoyancy, geometry)
    upward = vertical_gradient(buoyancy, thickness, geometry.mask)
    return _slopes(along_x, along_y, upward, geometry, least)


def neutral_slopes(
    temperature: FloatArray,
    salinity: FloatArray,
    pressure: FloatArray,
    thickness: FloatArray,
    geometry: Geometry,
    *,
    gravity: float = 9.81,
    least: float = LEAST_SQUARED_FREQUENCY,
) -> FloatArray:
    """Slopes of locally referenced neutral surfaces by TEOS-10.

    ``S = -(alpha grad_h T - beta grad_h S_A) / (alpha T_z - beta S_Az)`` with the expansion
    coefficients at the pressure of the place (McDougall 1987, J. Phys. Oceanogr. 17,
    1950-1964).

    Parameters
    ----------
    temperature : ndarray, shape (layer, y, x), K
        Conservative temperature.
    salinity : ndarray, shape (layer, y, x), g kg-1
        Absolute salinity.
    pressure : ndarray, shape (layer, y, x), Pa
    thickness : ndarray, shape (layer, y, x), m
    geometry : Geometry
    gravity : float, optional
        In m s-2.
    least : float, optional
        Least squared buoyancy frequency, s-2.

    Returns
    -------
    ndarray, shape (2, layer, y, x), 1
        NaN on land and where the column is less stable than ``least``.
    """
    expansion, contraction = expansion_coefficients(temperature, salinity, pressure)

    def buoyancy_like(of_temperature: FloatArray, of_salinity: FloatArray) -> FloatArray:
        return np.asarray(gravity * (expansion * of_temperature - contraction * of_salinity))

    along = [
        buoyancy_like(warm, salt)
        for warm, salt in zip(
            gradient(temperature, geometry), gradient(salinity, geometry), strict=True
        )
    ]
    upward = buoyancy_like(
        vertical_gradient(temperature, thickness, geometry.mask),
        vertical_gradient(salinity, thickness, geometry.mask),
    )
    return _slopes(along[0], along[1], upward, geometry, least)


def _slopes(
    along_x: FloatArray, along_y: FloatArray, upward: FloatArray, geometry: Geometry, least: float
) -> FloatArray:
    stable = geometry.mask & (upward >= least)
    flat = np.stack([along_x, along_y])
    return np.where(stable, -flat / np.where(stable, upward, 1.0), np.nan)


def slopes_of_layers(thickness: FloatArray, depth: FloatArray, geometry: Geometry) -> FloatArray:
    """Slopes of the middles of layers.

    Parameters
    ----------
    thickness : ndarray, shape (layer, y, x), m
        Mean thickness, zero where a layer is not there.
    depth : ndarray, shape (y, x), m
        Of the sea floor, from which layers are stacked up.
    geometry : Geometry

    Returns
    -------
    ndarray, shape (2, layer, y, x), 1
        Gradient of the height of the middle of each layer; NaN on land.
    """
    above_floor = np.cumsum(thickness[::-1], axis=0)[::-1]
    height = above_floor - 0.5 * thickness - depth
    return np.where(geometry.mask, np.stack(gradient(height, geometry)), np.nan)


def depth_tensor(
    tensor: FloatArray,
    skew_diffusivity: FloatArray | float,
    slopes: FloatArray,
    *,
    form: Form = "small-slope",
) -> FloatArray:
    """Turn an isoneutral tensor and a coefficient of Gent and McWilliams into depth axes.

    Parameters
    ----------
    tensor : ndarray, shape (..., 2, 2), m2 s-1
        Along isoneutral surfaces, antisymmetric part included.
    skew_diffusivity : ndarray, shape (...), or float, m2 s-1
    slopes : ndarray, shape (2, ...), 1
    form : {"small-slope", "full"}, optional

    Returns
    -------
    ndarray, shape (..., 3, 3), m2 s-1

    Examples
    --------
    >>> import numpy as np
    >>> depth_tensor(1000.0 * np.eye(2), 1000.0, np.array([1e-3, 0.0]))
    array([[1.e+03, 0.e+00, 0.e+00],
           [0.e+00, 1.e+03, 0.e+00],
           [2.e+00, 0.e+00, 1.e-03]])
    """
    basis = _basis(slopes, form)
    redi = np.einsum("...ia,...ab,...jb->...ij", basis, tensor, basis)
    return np.asarray(redi + skew_tensor(skew_diffusivity, slopes))


def skew_tensor(skew_diffusivity: FloatArray | float, slopes: FloatArray) -> FloatArray:
    """Antisymmetric tensor of the skew flux of Gent and McWilliams.

    Parameters
    ----------
    skew_diffusivity : ndarray, shape (...), or float, m2 s-1
    slopes : ndarray, shape (2, ...), 1

    Returns
    -------
    ndarray, shape (..., 3, 3), m2 s-1
    """
    tensor = np.zeros((*slopes.shape[1:], 3, 3))
    for axis in range(2):
        tensor[..., 2, axis] = skew_diffusivity * slopes[axis]
        tensor[..., axis, 2] = -tensor[..., 2, axis]
    return tensor


def _basis(slopes: FloatArray, form: Form) -> FloatArray:
    """Vectors in depth axes that horizontal unit vectors become, shape (..., 3, 2)."""
    basis = np.zeros((*slopes.shape[1:], 3, 2))
    basis[..., 0, 0] = basis[..., 1, 1] = 1.0
    basis[..., 2, 0], basis[..., 2, 1] = slopes[0], slopes[1]
    if form == "small-slope":
        return basis
    length = np.sqrt(1.0 + slopes[0] ** 2 + slopes[1] ** 2)
    shrink = 1.0 / (length * (length + 1.0))
    for row in range(2):
        for column in range(2):
            basis[..., row, column] -= shrink * slopes[row] * slopes[column]
        basis[..., 2, row] /= length
    return basis


def isoneutral_parts(
    tensor: FloatArray, slopes: FloatArray, *, form: Form = "small-slope"
) -> IsoneutralParts:
    """Take a tensor in depth axes apart along isoneutral surfaces.

    Parameters
    ----------
    tensor : ndarray, shape (..., 3, 3), m2 s-1
    slopes : ndarray, shape (2, ...), 1
    form : {"small-slope", "full"}, optional

    Returns
    -------
    IsoneutralParts
        The horizontal block, in the form asked for, and the coefficient that best fits the
        antisymmetric rest; NaN where slopes are.
    """
    if form == "small-slope":
        inside = tensor[..., :2, :2] + 0.0 * slopes[0][..., None, None]
    else:
        basis = _basis(slopes, form)
        inside = np.einsum("...ia,...ij,...jb->...ab", basis, tensor, basis)
    rest = tensor - depth_tensor(inside, 0.0, slopes, form=form)
    # The best fit of a skew tensor to the antisymmetric part of what is left.
    skew = 0.5 * (rest[..., 2, :2] - rest[..., :2, 2])
    steepness = slopes[0] ** 2 + slopes[1] ** 2
    product = skew[..., 0] * slopes[0] + skew[..., 1] * slopes[1]
    sloping = steepness > 0.0
    coefficient = np.where(sloping, product / np.where(sloping, steepness, 1.0), np.nan)
    known = np.where(sloping, coefficient, 0.0)
    return IsoneutralParts(inside, coefficient, np.asarray(rest - skew_tensor(known, slopes)))


def gerdes_taper(slopes: FloatArray, *, largest: float = 0.01) -> FloatArray:
    """Factor on diffusivities of steep slopes, ``min(1, (S_max/S)^2)``.

    Gerdes, Koeberle and Willebrand 1991, Climate Dynamics 5, 211-226.

    Parameters
    ----------
    slopes : ndarray, shape (2, ...), 1
    largest : float, optional
        Slope beyond which diffusivities are tapered.

    Returns
    -------
    ndarray, shape (...), 1
        Multiplies diffusivities, which keeps fluxes adiabatic; NaN where slopes are.
    """
    steepness = np.hypot(slopes[0], slopes[1])
    return np.asarray((largest / np.maximum(steepness, largest)) ** 2)


def danabasoglu_taper(
    slopes: FloatArray, *, centre: float = 0.004, width: float = 0.001
) -> FloatArray:
    """Factor on diffusivities of steep slopes, ``(1 + tanh((S_c - S)/S_d))/2``.

    Danabasoglu and McWilliams 1995, J. Climate 8, 2967-2987.

    Parameters
    ----------
    slopes : ndarray, shape (2, ...), 1
    centre, width : float, optional
        The ``S_c`` where the factor is one half, and ``S_d``.

    Returns
    -------
    ndarray, shape (...), 1
        Multiplies diffusivities, which keeps fluxes adiabatic; NaN where slopes are.
    """
    return np.asarray(0.5 * (1.0 + np.tanh((centre - np.hypot(slopes[0], slopes[1])) / width)))


def bolus_velocity(
    skew_diffusivity: FloatArray, slopes: FloatArray, thickness: FloatArray, geometry: Geometry
) -> FloatArray:
    """Eddy-induced velocity of Gent and McWilliams, ``-d_z(kappa S)`` and ``div_h(kappa S)``.

    Parameters
    ----------
    skew_diffusivity : ndarray, shape (layer, y, x), m2 s-1
        On levels; to be tapered to zero at surface and bottom.
    slopes : ndarray, shape (2, layer, y, x), 1
        Taken as zero where they are NaN.
    thickness : ndarray, shape (layer, y, x), m
    geometry : Geometry

    Returns
    -------
    ndarray, shape (3, layer, y, x), m s-1
    """
    transport = np.nan_to_num(skew_diffusivity * slopes, nan=0.0)
    along = [-vertical_gradient(part, thickness, geometry.mask) for part in transport]
    return np.stack([*along, divergence(transport[0], transport[1], geometry)])
