"""Units of every field read, and times in days."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.layout import LayoutReader
from learnclosure.ensemble.roles import Roles
from learnclosure.ensemble.sources import Member
from learnclosure.ensemble.units import (
    Conversion,
    conversion,
    salinity_conversion,
    tracer_conversion,
)
from learnclosure.errors import SourceError

SECONDS_PER_DAY = 86400.0


class Conversions(NamedTuple):
    """How fields come to SI units.

    Attributes
    ----------
    velocities, stratifying : dict of str to Conversion
        By part: a temperature may be a tracer as well as stratify.
    tracers : dict of str to Conversion
        By name in the files.
    active : dict of str to Conversion
        By part.
    before : dict of str to str
        Units in the files, by name.
    units : dict of str to str
        Units after reading, by name.
    """

    velocities: dict[str, Conversion]
    stratifying: dict[str, Conversion]
    tracers: dict[str, Conversion]
    active: dict[str, Conversion]
    before: dict[str, str]
    units: dict[str, str]


def find_conversions(roles: Roles, first: Member, assumptions: list[str]) -> Conversions:
    """Find how every field comes to SI units.

    Parameters
    ----------
    roles : Roles
    first : Member
        First member; all have the same units.
    assumptions : list of str
        What is assumed is added here.

    Returns
    -------
    Conversions

    Raises
    ------
    UnitError
        If a unit is unknown or measures something else.
    """
    said = {name: first.dataset[name].attrs.get("units") for name in roles.fields}
    for name, units in said.items():
        if units is None:
            assumptions.append(f"'{name}' is a pure number, since it has no units")
    before = {name: "" if units is None else str(units) for name, units in said.items()}

    def to(name: str, target: str) -> Conversion:
        return conversion(before[name], target, first.where(name))

    velocities = {
        "x_velocity": to(roles.x_velocity, "m s-1"),
        "y_velocity": to(roles.y_velocity, "m s-1"),
    }
    if roles.z_velocity is not None:
        velocities["z_velocity"] = to(roles.z_velocity, "m s-1")
    tracers = {
        name: tracer_conversion(before[name], first.where(name))
        for name in (*roles.tracers, *roles.withheld_tracers)
    }
    stratifying = {}
    for part, name in roles.stratifying.items():
        if part == "salinity":
            known = str(first.dataset[name].attrs.get("standard_name", ""))
            stratifying[part], practical = salinity_conversion(
                before[name], known, first.where(name)
            )
            kind = "practical, turned into reference salinity" if practical else "absolute"
            assumptions.append(f"the salinity '{name}' is {kind}")
        else:
            stratifying[part] = to(name, "K" if part == "temperature" else "m s-2")
    units = {roles.stratifying[part]: change.units for part, change in stratifying.items()}
    units |= {name: change.units for name, change in tracers.items()}
    units |= {getattr(roles, part): change.units for part, change in velocities.items()}
    active = {
        part: to(name, "m")
        if part == "thickness"
        else tracer_conversion(before[name], first.where(name))
        for part, name in roles.active.items()
    }
    # Under the names of the parts as well, since fields are returned under those.
    units |= {name: active[part].units for part, name in roles.active.items()}
    units |= {part: change.units for part, change in active.items()}
    return Conversions(velocities, stratifying, tracers, active, before, units)


def read_times(reader: LayoutReader) -> npt.NDArray[np.float64]:
    """Read the times, whatever their reference date, which may be missing.

    Parameters
    ----------
    reader : LayoutReader

    Returns
    -------
    ndarray, shape (time,), days

    Raises
    ------
    UnitError
        If their unit is none of time.
    SourceError
        If they do not grow: a time read twice would count twice.
    """
    name = reader.axes.time
    if name is None:
        reader.assumptions.append("there is one time, since nothing is a time dimension")
        return np.zeros(1)
    if name not in reader.dataset.variables:
        reader.assumptions.append("times are a day apart, since they have no coordinate")
        return np.arange(reader.dataset.sizes[name], dtype=np.float64)
    where = f"{reader.where}: {name}"
    unit = reader.units_of(name, "days").split(" since ")[0]
    values = np.asarray(reader.dataset[name].values, dtype=np.float64)
    times = conversion(unit, "s", where)(values) / SECONDS_PER_DAY
    if not (np.diff(times) > 0.0).all():
        raise SourceError(
            "times do not grow",
            where=where,
            found=f"{int(np.count_nonzero(np.diff(times) <= 0.0))} steps that are not positive",
            expected="each time once, in order",
            remedy="remove times that are there twice, or sort them",
        )
    return times
