"""Buoyancy of a member from what its files hold."""

from __future__ import annotations

from collections.abc import Callable

import gsw
import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Grid
from learnclosure.ensemble.roles import Roles
from learnclosure.ensemble.rotation import EARTH_ROTATION
from learnclosure.errors import RoleError
from learnclosure.study import EnsembleTable, Seawater

FloatArray = npt.NDArray[np.float64]
BuoyancyRule = Callable[[FloatArray, FloatArray | None], FloatArray]

GRAVITY = 9.81
REFERENCE_DENSITY = 1025.0
FREEZING_POINT_OF_WATER = 273.15
SALINITY_OF_REFERENCE = 35.0
KINDS = {
    "sea_water_conservative_temperature": "conservative",
    "sea_water_potential_temperature": "potential",
    "sea_water_temperature": "in-situ",
}


def _linear(seawater: Seawater, where: str) -> BuoyancyRule:
    expansion = seawater.thermal_expansion
    if expansion is None:
        raise RoleError(
            "buoyancy from temperature needs the thermal expansion coefficient",
            where=where,
            remedy="set 'thermal_expansion' in K-1 under [ensemble.seawater]",
        )
    contraction = seawater.haline_contraction

    def rule(temperature: FloatArray, salinity: FloatArray | None) -> FloatArray:
        buoyancy = GRAVITY * expansion * (temperature - FREEZING_POINT_OF_WATER)
        if salinity is None or contraction == 0.0:
            return buoyancy
        return buoyancy - GRAVITY * contraction * (salinity - SALINITY_OF_REFERENCE)

    return rule


def _teos10(kind: str, grid: Grid) -> BuoyancyRule:
    middle = np.cumsum(grid.layer_thickness, axis=0) - 0.5 * grid.layer_thickness
    sine = np.clip(0.5 * grid.coriolis_parameter / EARTH_ROTATION, -1.0, 1.0)
    pressure = gsw.p_from_z(-middle, np.degrees(np.arcsin(sine)))

    def rule(temperature: FloatArray, salinity: FloatArray | None) -> FloatArray:
        celsius = temperature - FREEZING_POINT_OF_WATER
        if kind == "in-situ":
            celsius = gsw.CT_from_t(salinity, celsius, pressure)
        elif kind == "potential":
            celsius = gsw.CT_from_pt(salinity, celsius)
        anomaly = gsw.sigma0(salinity, celsius) + 1000.0 - REFERENCE_DENSITY
        return np.asarray(-GRAVITY * anomaly / REFERENCE_DENSITY)

    return rule


def _temperature_kind(seawater: Seawater, standard_name: str, where: str) -> str:
    """Return the kind of temperature the study names, else the one CF attributes tell."""
    kind = seawater.temperature_kind or KINDS.get(standard_name)
    if kind is None:
        raise RoleError(
            "the kind of temperature is unknown",
            where=where,
            expected="conservative, potential or in-situ",
            remedy="set 'temperature_kind' under [ensemble.seawater]",
        )
    return kind


def buoyancy_rule(
    table: EnsembleTable,
    roles: Roles,
    grid: Grid,
    temperature_name: str,
    assumptions: list[str],
) -> BuoyancyRule | None:
    """Choose how buoyancy follows from temperature and salinity.

    Parameters
    ----------
    table : EnsembleTable
    roles : Roles
    grid : Grid
    temperature_name : str
        CF standard name of the temperature, empty if it has none.
    assumptions : list of str
        What is assumed is added here.

    Returns
    -------
    callable or None
        Takes temperature in K and absolute salinity in g kg-1 and returns buoyancy in
        m s-2; None if no temperature is named or buoyancy itself is given.

    Raises
    ------
    RoleError
        If the equation of state lacks something.
    """
    where = f"ensemble '{table.name}'"
    if roles.temperature is None or roles.buoyancy is not None:
        return None
    seawater = table.seawater
    if seawater is None:
        raise RoleError(
            "buoyancy from temperature needs an equation of state",
            where=where,
            remedy="add [ensemble.seawater] with 'equation' and what belongs to it",
        )
    if seawater.equation == "linear":
        rule = _linear(seawater, where)
        assumptions.append(
            f"buoyancy by a linear equation of state, thermal expansion "
            f"{seawater.thermal_expansion} K-1, haline contraction "
            f"{seawater.haline_contraction} kg g-1"
        )
        if roles.salinity is None and seawater.haline_contraction > 0.0:
            raise RoleError(
                "haline contraction needs a salinity",
                where=where,
                remedy="name 'salinity' under [ensemble.variables]",
            )
        return rule
    if roles.salinity is None:
        raise RoleError(
            "buoyancy by TEOS-10 needs a salinity",
            where=where,
            remedy="name 'salinity' under [ensemble.variables]",
        )
    kind = _temperature_kind(seawater, temperature_name, where)
    assumptions.append(
        f"buoyancy from potential density referenced to the surface (TEOS-10), {kind} temperature"
    )
    if kind == "in-situ":
        assumptions.append("pressure at resting depth and the latitude of the Coriolis parameter")
    return _teos10(kind, grid)
