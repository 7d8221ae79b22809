"""Buoyancy of a member from what its files hold."""

from __future__ import annotations

from collections.abc import Callable

import gsw
import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Grid
from learnclosure.ensemble.roles import Roles
from learnclosure.errors import RoleError
from learnclosure.study import EnsembleTable, Seawater

FloatArray = npt.NDArray[np.float64]
BuoyancyRule = Callable[[FloatArray, FloatArray | None], FloatArray]

GRAVITY = 9.81
REFERENCE_DENSITY = 1025.0
FREEZING_POINT_OF_WATER = 273.15
SALINITY_OF_REFERENCE = 35.0


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


def _teos10(seawater: Seawater, grid: Grid, latitude: float, where: str) -> BuoyancyRule:
    if seawater.temperature_kind is None:
        raise RoleError(
            "the kind of temperature is unknown",
            where=where,
            expected="conservative, potential or in-situ",
            remedy="set 'temperature_kind' under [ensemble.seawater]",
        )
    kind = seawater.temperature_kind
    middle = np.cumsum(grid.layer_thickness, axis=0) - 0.5 * grid.layer_thickness
    pressure = gsw.p_from_z(-middle, latitude)

    def rule(temperature: FloatArray, salinity: FloatArray | None) -> FloatArray:
        celsius = temperature - FREEZING_POINT_OF_WATER
        if kind == "in-situ":
            celsius = gsw.CT_from_t(salinity, celsius, pressure)
        elif kind == "potential":
            celsius = gsw.CT_from_pt(salinity, celsius)
        anomaly = gsw.sigma0(salinity, celsius) + 1000.0 - REFERENCE_DENSITY
        return np.asarray(-GRAVITY * anomaly / REFERENCE_DENSITY)

    return rule


def buoyancy_rule(
    table: EnsembleTable, roles: Roles, grid: Grid, assumptions: list[str]
) -> BuoyancyRule | None:
    """Choose how buoyancy follows from temperature and salinity.

    Parameters
    ----------
    table : EnsembleTable
    roles : Roles
    grid : Grid
    assumptions : list of str
        What is assumed is added here.

    Returns
    -------
    callable or None
        Takes temperature in K and salinity in g kg-1 and returns buoyancy in m s-2; None
        if no temperature is named or buoyancy itself is given.

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
        assumptions.append(
            f"buoyancy by a linear equation of state, thermal expansion "
            f"{seawater.thermal_expansion} K-1, haline contraction "
            f"{seawater.haline_contraction} kg g-1"
        )
        return _linear(seawater, where)
    if roles.salinity is None:
        raise RoleError(
            "buoyancy by TEOS-10 needs a salinity",
            where=where,
            remedy="name 'salinity' under [ensemble.variables]",
        )
    given = table.grid.latitude
    latitude = given if isinstance(given, float) else 45.0
    assumptions.append(
        "buoyancy from potential density referenced to the surface (TEOS-10), salinity taken "
        f"as absolute, {seawater.temperature_kind} temperature"
    )
    return _teos10(seawater, grid, latitude, where)
