"""Formulas of classical closures, elementwise in NumPy and in the graph."""

from __future__ import annotations

from typing import Any

from learnclosure.closures.constraints import TINY
from learnclosure.features.scales import LEAST_BETA

LARGEST_DIFFUSIVITY = 5e4
"""Where a formula has no bound of its own this is taken, m2 s-1."""
LARGEST_CRITICALITY = 10.0
"""The cascade of Held and Larichev is stopped by something else by then."""
LEAST_INVERSE_TIME = 1e-8
"""Growth slower than this, s-1, bounds no eddy energy."""


def eady_visbeck_diffusivity(inverse_time: Any, length: Any, factor: Any) -> Any:
    """Diffusivity from the rate of baroclinic growth and a length.

    Parameters
    ----------
    inverse_time : array, s-1
        ``|f| / sqrt(Ri)``, averaged over the column.
    length : array, m
    factor : array or float, 1
        0.015 as published.

    Returns
    -------
    array, m2 s-1
        ``factor * inverse_time * length^2`` (Visbeck et al. 1997, J. Phys. Oceanogr. 27,
        381-402).

    Examples
    --------
    >>> round(eady_visbeck_diffusivity(2.5e-6, 100e3, 0.015), 6)
    375.0
    """
    return factor * inverse_time * length * length


def mixing_length_diffusivity(
    speed: Any, length: Any, relative_speed: Any = 0.0, *, factor: Any = 0.35, b1: float = 4.0
) -> Any:
    """Diffusivity from eddy speed and mixing length, suppressed by the mean flow.

    Parameters
    ----------
    speed : array, m s-1
        Root mean square eddy speed ``sqrt(2 EKE)``.
    length : array, m
    relative_speed : array, m s-1
        Mean flow minus eddy phase speed; zero for no suppression.
    factor, b1 : float, 1
        Constants, as published by default.

    Returns
    -------
    array, m2 s-1
        ``factor speed length / (1 + b1 relative_speed^2 / speed^2)`` (Bates et al. 2014,
        J. Phys. Oceanogr. 44, 1523-1540).

    Examples
    --------
    >>> speed = 0.02 ** 0.5
    >>> [round(mixing_length_diffusivity(speed, 30e3, c), 2) for c in (0.0, 0.05, 0.1, 0.2)]
    [1484.92, 989.95, 494.97, 164.99]
    """
    square = speed * speed
    return factor * speed * length * square / (square + b1 * relative_speed * relative_speed + TINY)


def held_larichev_diffusivity(speed: Any, radius: Any, beta: Any, *, xp: Any) -> Any:
    """Diffusivity of a cascade that beta stops.

    Parameters
    ----------
    speed : array, m s-1
        Velocity of the vertical shear.
    radius : array, m
        Deformation radius.
    beta : array, m-1 s-1
    xp : namespace
        Array namespace: NumPy or the graph.

    Returns
    -------
    array, m2 s-1
        ``U R xi^2`` with the criticality ``xi = U / (beta R^2)``, at most 10 here; zero
        where xi is below 1, as nothing cascades there.

    Notes
    -----
    Held and Larichev 1996, J. Atmos. Sci. 53, 946-952 (form from memory).

    Examples
    --------
    >>> import numpy as np
    >>> round(held_larichev_diffusivity(0.02, 25464.8, 2e-11, xp=np).item(), 0)
    1211.0
    """
    slowest = xp.maximum(beta, LEAST_BETA) * radius * radius
    criticality = xp.minimum(speed / xp.maximum(slowest, TINY), LARGEST_CRITICALITY)
    found = speed * radius * criticality * criticality
    return xp.where(criticality < 1.0, 0.0 * found, found)


def suppressed_diffusivity(
    energy: Any, decay: float, wavenumber: Any, relative_speed: Any = 0.0
) -> Any:
    """Diffusivity of eddies that drift relative to the mean flow.

    Parameters
    ----------
    energy : array, m2 s-2
        Eddy kinetic energy; of isotropic eddies the variance of one component.
    decay : float, s-1
        Rate at which eddies lose their memory.
    wavenumber : array, m-1
    relative_speed : array, m s-1
        Mean flow minus eddy phase speed; zero at a steering level.

    Returns
    -------
    array, m2 s-1
        ``(energy / decay) / (1 + wavenumber^2 relative_speed^2 / decay^2)``.

    Notes
    -----
    Ferrari and Nikurashin 2010, J. Phys. Oceanogr. 40, 1501-1519 (form from memory); the
    same as the diffusivity of a velocity that spins while it forgets (Taylor 1921).

    Examples
    --------
    >>> import math
    >>> [
    ...     round(suppressed_diffusivity(0.01, 1 / 345600, 2 * math.pi / 300e3, c), 2)
    ...     for c in (0.0, 0.05, 0.1, 0.2)
    ... ]
    [3456.0, 3055.76, 2267.84, 1116.39]
    """
    turning = wavenumber * relative_speed / decay
    return energy / decay / (1.0 + turning * turning)


def energy_bounded_diffusivity(energy: Any, inverse_time: Any, efficiency: Any, *, xp: Any) -> Any:
    """Diffusivity that eddy energy and the mean state allow.

    From ``|<u'b'>| <= N E`` with the total eddy energy E the coefficient of the buoyancy
    flux is at most ``N E / M^2``, M^2 the horizontal buoyancy gradient, and
    ``M^2 / N = |f| / sqrt(Ri)``.

    Parameters
    ----------
    energy : array, m2 s-2
    inverse_time : array, s-1
        ``|f| / sqrt(Ri)``.
    efficiency : array or float, 1
        Between 0 and 1.
    xp : namespace
        Array namespace: NumPy or the graph.

    Returns
    -------
    array, m2 s-1
        ``efficiency * energy / inverse_time``, growth at least 1e-8 s-1.

    Notes
    -----
    Marshall, Maddison and Berloff 2012, J. Phys. Oceanogr. 42, 539-557; Mak et al. 2018,
    J. Phys. Oceanogr. 48, 2363-2382.

    Examples
    --------
    >>> import numpy as np
    >>> m_squared, n = 5e-9, 2e-3
    >>> round(energy_bounded_diffusivity(0.01, m_squared / n, 1.0, xp=np).item(), 6)
    4000.0
    """
    return efficiency * energy / xp.maximum(inverse_time, LEAST_INVERSE_TIME)


def relative_to_eddies(inputs: Any) -> tuple[Any, Any]:
    """Mean flow relative to eddies that drift with the column and against beta.

    Parameters
    ----------
    inputs : mapping of str to array
        Velocity and column velocity in m s-1, beta in m-1 s-1, deformation radius in m.

    Returns
    -------
    along_x, along_y : array, m s-1
        ``U - c`` with ``c`` the mean flow of the column plus the drift of long Rossby
        waves, ``beta Ld^2`` with the gradient of f to its right.

    Notes
    -----
    Klocker and Marshall 2014, J. Phys. Oceanogr. 44, 1587-1603 (from memory).
    """
    square = inputs["deformation_radius"] * inputs["deformation_radius"]
    return (
        inputs["x_velocity"] - inputs["column_velocity_x"] + square * inputs["planetary_beta_y"],
        inputs["y_velocity"] - inputs["column_velocity_y"] - square * inputs["planetary_beta_x"],
    )
