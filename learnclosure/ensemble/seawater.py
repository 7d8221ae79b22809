"""Density, buoyancy and stability of seawater in SI units, by TEOS-10 or a linear equation.

TEOS-10 is evaluated by the Gibbs-SeaWater toolbox (IOC, SCOR and IAPSO 2010; McDougall and
Barker 2011, SCOR/IAPSO WG127). Temperatures are in K, absolute salinities in g kg-1 and
sea pressures, which are zero at the surface, in Pa.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, Protocol

import gsw
import numpy as np
import numpy.typing as npt

FloatArray = npt.NDArray[np.float64]
TemperatureKind = Literal["conservative", "potential", "in-situ"]

GRAVITY = 9.81
REFERENCE_DENSITY = 1025.0
FREEZING_POINT_OF_WATER = 273.15
SALINITY_OF_REFERENCE = 35.0
PASCAL_PER_DECIBAR = 1e4


class EquationOfState(Protocol):
    """How density and buoyancy follow from temperature and salinity."""

    def __call__(self, temperature: FloatArray, salinity: FloatArray | None) -> FloatArray:
        """Return buoyancy in m s-2."""
        ...

    def potential_density(
        self, temperature: FloatArray, salinity: FloatArray | None, reference_pressure: float
    ) -> FloatArray:
        """Return potential density in kg m-3, referenced to a sea pressure in Pa."""
        ...

    def describe(self, reference_pressure: float) -> str:
        """Return in words how potential density is found."""
        ...


@dataclass(frozen=True)
class LinearSeawater:
    """Linear equation of state.

    Attributes
    ----------
    thermal_expansion : float, K-1
    haline_contraction : float, kg g-1
    """

    thermal_expansion: float
    haline_contraction: float = 0.0

    def __call__(self, temperature: FloatArray, salinity: FloatArray | None) -> FloatArray:
        """Return buoyancy.

        Parameters
        ----------
        temperature : ndarray, K
        salinity : ndarray or None, g kg-1

        Returns
        -------
        ndarray, m s-2
            Zero at 0 degrees Celsius and 35 g kg-1.
        """
        warmth = temperature - FREEZING_POINT_OF_WATER
        buoyancy = GRAVITY * self.thermal_expansion * warmth
        if salinity is None or self.haline_contraction == 0.0:
            return buoyancy
        return buoyancy - GRAVITY * self.haline_contraction * (salinity - SALINITY_OF_REFERENCE)

    def potential_density(
        self,
        temperature: FloatArray,
        salinity: FloatArray | None,
        reference_pressure: float,  # noqa: ARG002
    ) -> FloatArray:
        """Return density, which by this equation does not depend on pressure.

        Parameters
        ----------
        temperature : ndarray, K
        salinity : ndarray or None, g kg-1
        reference_pressure : float, Pa

        Returns
        -------
        ndarray, kg m-3
        """
        return density_from_buoyancy(self(temperature, salinity))

    def describe(self, reference_pressure: float) -> str:  # noqa: ARG002
        """Return in words how potential density is found."""
        return "density by the linear equation of state, which knows no pressure"


@dataclass(frozen=True)
class Teos10Seawater:
    """Equation of state TEOS-10.

    Attributes
    ----------
    kind : {"conservative", "potential", "in-situ"}
        Which temperature is given.
    pressure : ndarray, shape (layer, y, x), Pa
        Sea pressure of the cells, which temperatures in situ need.
    """

    kind: TemperatureKind
    pressure: FloatArray

    def __call__(self, temperature: FloatArray, salinity: FloatArray | None) -> FloatArray:
        """Return buoyancy from potential density referenced to the surface.

        Parameters
        ----------
        temperature : ndarray, shape (..., layer, y, x), K
        salinity : ndarray, shape (..., layer, y, x), g kg-1

        Returns
        -------
        ndarray, m s-2
        """
        return buoyancy_from_density(self.potential_density(temperature, salinity, 0.0))

    def potential_density(
        self, temperature: FloatArray, salinity: FloatArray | None, reference_pressure: float
    ) -> FloatArray:
        """Return potential density.

        Parameters
        ----------
        temperature : ndarray, shape (..., layer, y, x), K
        salinity : ndarray, shape (..., layer, y, x), g kg-1
        reference_pressure : float, Pa

        Returns
        -------
        ndarray, kg m-3
        """
        warmth = conservative_temperature(temperature, salinity, self.kind, self.pressure)
        return np.asarray(
            gsw.rho(
                salinity, warmth - FREEZING_POINT_OF_WATER, reference_pressure / PASCAL_PER_DECIBAR
            )
        )

    def describe(self, reference_pressure: float) -> str:
        """Return in words how potential density is found."""
        return (
            f"potential density by TEOS-10 from {self.kind} temperature, referenced to "
            f"{reference_pressure / PASCAL_PER_DECIBAR:g} dbar"
        )


def buoyancy_from_density(density: FloatArray) -> FloatArray:
    """Return buoyancy, minus g times the relative density anomaly.

    Parameters
    ----------
    density : ndarray, kg m-3

    Returns
    -------
    ndarray, m s-2
    """
    return np.asarray(-GRAVITY * (density - REFERENCE_DENSITY) / REFERENCE_DENSITY)


def density_from_buoyancy(buoyancy: FloatArray) -> FloatArray:
    """Return density, the inverse of :func:`buoyancy_from_density`.

    Parameters
    ----------
    buoyancy : ndarray, m s-2

    Returns
    -------
    ndarray, kg m-3
    """
    return np.asarray(REFERENCE_DENSITY * (1.0 - buoyancy / GRAVITY))


def pressure_at_depth(depth: FloatArray, latitude: FloatArray) -> FloatArray:
    """Return the sea pressure of resting seawater.

    Parameters
    ----------
    depth : ndarray, m
        Positive down.
    latitude : ndarray, degrees north

    Returns
    -------
    ndarray, Pa
    """
    return np.asarray(PASCAL_PER_DECIBAR * gsw.p_from_z(-depth, latitude))


def conservative_temperature(
    temperature: FloatArray,
    salinity: FloatArray | None,
    kind: TemperatureKind,
    pressure: FloatArray,
) -> FloatArray:
    """Return conservative temperature from any kind of temperature.

    Parameters
    ----------
    temperature : ndarray, K
    salinity : ndarray, g kg-1
        Absolute salinity.
    kind : {"conservative", "potential", "in-situ"}
        Which temperature is given; potential ones are referenced to the surface.
    pressure : ndarray, Pa
        Sea pressure, used for temperatures in situ.

    Returns
    -------
    ndarray, K
    """
    celsius = temperature - FREEZING_POINT_OF_WATER
    if kind == "in-situ":
        celsius = gsw.CT_from_t(salinity, celsius, pressure / PASCAL_PER_DECIBAR)
    elif kind == "potential":
        celsius = gsw.CT_from_pt(salinity, celsius)
    return np.asarray(celsius + FREEZING_POINT_OF_WATER)


def squared_buoyancy_frequency(
    temperature: FloatArray, salinity: FloatArray, pressure: FloatArray, latitude: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return the squared buoyancy frequency between neighbouring levels.

    Parameters
    ----------
    temperature : ndarray, shape (layer, ...), K
        Conservative temperature.
    salinity : ndarray, shape (layer, ...), g kg-1
        Absolute salinity.
    pressure : ndarray, shape (layer, ...), Pa
    latitude : ndarray, degrees north

    Returns
    -------
    squared_frequency : ndarray, shape (layer - 1, ...), s-2
    pressure : ndarray, shape (layer - 1, ...), Pa
        Where it holds, midway between the levels.
    """
    squared, middle = gsw.Nsquared(
        salinity,
        temperature - FREEZING_POINT_OF_WATER,
        pressure / PASCAL_PER_DECIBAR,
        latitude,
        axis=0,
    )
    return np.asarray(squared), np.asarray(PASCAL_PER_DECIBAR * middle)


def expansion_coefficients(
    temperature: FloatArray, salinity: FloatArray, pressure: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return thermal expansion and haline contraction at constant conservative temperature.

    Parameters
    ----------
    temperature : ndarray, K
        Conservative temperature.
    salinity : ndarray, g kg-1
    pressure : ndarray, Pa

    Returns
    -------
    thermal_expansion : ndarray, K-1
    haline_contraction : ndarray, kg g-1
        Per g kg-1 of absolute salinity.
    """
    _, expansion, contraction = gsw.rho_alpha_beta(
        salinity, temperature - FREEZING_POINT_OF_WATER, pressure / PASCAL_PER_DECIBAR
    )
    return np.asarray(expansion), np.asarray(contraction)
