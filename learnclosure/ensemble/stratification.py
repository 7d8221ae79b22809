"""Buoyancy of a member from what its files hold."""

from __future__ import annotations

import numpy as np

from learnclosure.ensemble.grid import Grid
from learnclosure.ensemble.roles import Roles
from learnclosure.ensemble.rotation import EARTH_ROTATION
from learnclosure.ensemble.seawater import (
    EquationOfState,
    LinearSeawater,
    TemperatureKind,
    Teos10Seawater,
    pressure_at_depth,
)
from learnclosure.errors import RoleError
from learnclosure.study import EnsembleTable, Seawater

KINDS: dict[str, TemperatureKind] = {
    "sea_water_conservative_temperature": "conservative",
    "sea_water_potential_temperature": "potential",
    "sea_water_temperature": "in-situ",
}


def _linear(seawater: Seawater, where: str) -> LinearSeawater:
    if seawater.thermal_expansion is None:
        raise RoleError(
            "buoyancy from temperature needs the thermal expansion coefficient",
            where=where,
            remedy="set 'thermal_expansion' in K-1 under [ensemble.seawater]",
        )
    return LinearSeawater(seawater.thermal_expansion, seawater.haline_contraction)


def _teos10(kind: TemperatureKind, grid: Grid) -> Teos10Seawater:
    middle = np.cumsum(grid.layer_thickness, axis=0) - 0.5 * grid.layer_thickness
    sine = np.clip(0.5 * grid.coriolis_parameter / EARTH_ROTATION, -1.0, 1.0)
    return Teos10Seawater(kind, pressure_at_depth(middle, np.degrees(np.arcsin(sine))))


def _temperature_kind(
    seawater: Seawater, standard_name: str, where: str, assumptions: list[str]
) -> TemperatureKind:
    """Return the kind of temperature the study names, else the one CF attributes tell."""
    known = KINDS.get(standard_name)
    kind = seawater.temperature_kind or known
    if kind is None:
        raise RoleError(
            "the kind of temperature is unknown",
            where=where,
            expected="conservative, potential or in-situ",
            remedy="set 'temperature_kind' under [ensemble.seawater]",
        )
    if known not in (None, kind):
        assumptions.append(
            f"the temperature is {kind} as the study says, although the files' standard_name "
            f"'{standard_name}' makes it {known}"
        )
    return kind


def buoyancy_rule(
    table: EnsembleTable,
    roles: Roles,
    grid: Grid,
    temperature_name: str,
    assumptions: list[str],
) -> EquationOfState | None:
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
    EquationOfState or None
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
    kind = _temperature_kind(seawater, temperature_name, where, assumptions)
    assumptions.append(
        f"buoyancy from potential density referenced to the surface (TEOS-10), {kind} temperature"
    )
    if kind == "in-situ":
        assumptions.append("pressure at resting depth and the latitude of the Coriolis parameter")
    return _teos10(kind, grid)
