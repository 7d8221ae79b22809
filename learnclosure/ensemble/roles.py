"""Which variable plays which part, from the study or from CF attributes."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field

import xarray as xr

from learnclosure.ensemble.active import find_active
from learnclosure.errors import DiagnosisError, RoleError
from learnclosure.study import EnsembleTable

STANDARD_NAMES = {
    "x_velocity": ("sea_water_x_velocity", "eastward_sea_water_velocity"),
    "y_velocity": ("sea_water_y_velocity", "northward_sea_water_velocity"),
}
UPWARD_STANDARD_NAME = "upward_sea_water_velocity"
SCALAR_STANDARD_NAMES = {
    "temperature": (
        "sea_water_conservative_temperature",
        "sea_water_potential_temperature",
        "sea_water_temperature",
    ),
    "salinity": (
        "sea_water_absolute_salinity",
        "sea_water_practical_salinity",
        "sea_water_salinity",
    ),
}
LEAST_TRACERS = 2


@dataclass(frozen=True)
class Roles:
    """Names of the variables that play a part.

    Attributes
    ----------
    x_velocity, y_velocity : str
    tracers, withheld_tracers : tuple of str
    buoyancy, temperature, salinity : str or None
        For the stratification, where it is not fixed in time.
    z_velocity : str or None
        Upward velocity.
    total_fluxes : mapping of str to tuple of str
        Total fluxes along x and y by tracer, where the model summed them over its steps.
    potential_vorticity, thickness : str or None
        For the active side of the diagnosis.
    """

    x_velocity: str
    y_velocity: str
    tracers: tuple[str, ...]
    withheld_tracers: tuple[str, ...]
    buoyancy: str | None
    temperature: str | None
    salinity: str | None
    z_velocity: str | None = None
    total_fluxes: Mapping[str, tuple[str, str]] = field(default_factory=dict)
    potential_vorticity: str | None = None
    thickness: str | None = None

    @property
    def active(self) -> dict[str, str]:
        """Variables that act on the flow, by part; buoyancy is among the stratifying ones."""
        parts = {"potential_vorticity": self.potential_vorticity, "thickness": self.thickness}
        return {part: name for part, name in parts.items() if name is not None}

    @property
    def stratifying(self) -> dict[str, str]:
        """Variables the stratification comes from, by part."""
        if self.buoyancy is not None:
            return {"buoyancy": self.buoyancy}
        parts = {"temperature": self.temperature, "salinity": self.salinity}
        return {part: name for part, name in parts.items() if name is not None}

    @property
    def scalars(self) -> tuple[str, ...]:
        """All fields at cell centres, each once, tracers first."""
        names = (
            *self.tracers,
            *self.withheld_tracers,
            *self.stratifying.values(),
            *self.active.values(),
        )
        return tuple(dict.fromkeys(names))

    @property
    def fields(self) -> tuple[str, ...]:
        """All fields read, each once."""
        upward = () if self.z_velocity is None else (self.z_velocity,)
        fluxes = (name for pair in self.total_fluxes.values() for name in pair)
        names = (self.x_velocity, self.y_velocity, *upward, *self.scalars, *fluxes)
        return tuple(dict.fromkeys(names))


def _fields(dataset: xr.Dataset) -> list[str]:
    """Names of variables that may be a velocity or a tracer: three dimensions or more."""
    return [
        str(name)
        for name, variable in dataset.data_vars.items()
        if variable.ndim >= 3 and variable.dtype.kind == "f"
    ]


def _listed(names: Iterable[str]) -> str:
    return ", ".join(names) or "none"


def require_variable(dataset: xr.Dataset, name: str, part: str, where: object) -> str:
    """Return a variable's name if the dataset has it.

    Parameters
    ----------
    dataset : xarray.Dataset
    name : str
    part : str
        The study key that names it.
    where : object
        File, for the message.

    Returns
    -------
    str

    Raises
    ------
    RoleError
        If the dataset has no such variable; the message lists those it has.
    """
    if name in dataset.variables:
        return name
    raise RoleError(
        f"the variable named by '{part}' is missing",
        where=f"{where}: {name}",
        found=_listed(str(other) for other in dataset.variables),
        expected=name,
        remedy=f"correct '{part}' in the study",
    )


def _velocity(dataset: xr.Dataset, part: str, named: str | None, where: object) -> str:
    if named is not None:
        return require_variable(dataset, named, part, where)
    found = [
        name
        for name in _fields(dataset)
        if dataset[name].attrs.get("standard_name") in STANDARD_NAMES[part]
    ]
    if len(found) == 1:
        return found[0]
    raise RoleError(
        f"no variable is known to be '{part}'" if not found else f"several may be '{part}'",
        where=where,
        found=_listed(found or _fields(dataset)),
        expected=f"one with the standard_name {' or '.join(STANDARD_NAMES[part])}",
        remedy=f"name it under [ensemble.variables] {part}",
    )


def find_roles(table: EnsembleTable, dataset: xr.Dataset, where: object) -> Roles:
    """Find the variables of one member that the diagnosis needs.

    Parameters
    ----------
    table : EnsembleTable
    dataset : xarray.Dataset
        The first member.
    where : object
        Its file, for messages.

    Returns
    -------
    Roles

    Raises
    ------
    RoleError
        If a velocity or a named variable is missing.
    DiagnosisError
        If fewer than two tracers are left for the inversion.
    """
    names = table.variables
    x_velocity = _velocity(dataset, "x_velocity", names.x_velocity, where)
    y_velocity = _velocity(dataset, "y_velocity", names.y_velocity, where)
    if names.tracers is None:
        tracers = _with_tracer_role(dataset, "inversion")
        withheld = names.withheld_tracers or _with_tracer_role(dataset, "withheld")
    else:
        tracers, withheld = names.tracers, names.withheld_tracers
    for part, listed in (("tracers", tracers), ("withheld_tracers", withheld)):
        for name in listed:
            require_variable(dataset, name, f"[ensemble.variables] {part}", where)
    twice = [name for name in tracers if (*tracers, *withheld).count(name) > 1]
    if twice:
        raise RoleError(
            "a tracer is named twice",
            where=f"{where}: {twice[0]}",
            remedy="name it once, under 'tracers' or under 'withheld_tracers'",
        )
    if len(tracers) < LEAST_TRACERS:
        others = [name for name in _fields(dataset) if name not in (x_velocity, y_velocity)]
        raise DiagnosisError(
            "a transport tensor needs at least two tracers",
            where=where,
            found=f"{len(tracers)} ({_listed(tracers)})",
            expected=f"two or more of {_listed(others)}",
            remedy="name them under [ensemble.variables] tracers",
        )
    optional = find_active(table, dataset, (*tracers, *withheld), where)
    for part in ("buoyancy", "temperature", "salinity"):
        named = getattr(names, part)
        if named is not None:
            require_variable(dataset, named, f"[ensemble.variables] {part}", where)
        elif table.seawater is not None:
            named = _known_scalar(dataset, part)
        optional[part] = named
    optional["z_velocity"] = _upward_velocity(table, dataset, tracers[0], where)
    fluxes = _total_fluxes(table, dataset, (*tracers, *withheld), where)
    return Roles(
        x_velocity, y_velocity, tuple(tracers), tuple(withheld), **optional, total_fluxes=fluxes
    )


def _total_fluxes(
    table: EnsembleTable, dataset: xr.Dataset, tracers: tuple[str, ...], where: object
) -> dict[str, tuple[str, str]]:
    """Total fluxes named by the study, or by their attribute ``total_flux_of``."""
    named = table.variables.total_fluxes
    for tracer, pair in named.items():
        if tracer not in tracers:
            raise RoleError(
                "total fluxes are named for something that is no tracer",
                where=f"{where}: {tracer}",
                expected=f"one of {_listed(tracers)}",
                remedy="correct [ensemble.variables] total_fluxes in the study",
            )
        for name in pair:
            require_variable(dataset, name, "[ensemble.variables] total_fluxes", where)
    if named:
        return dict(named)
    found = {}
    for tracer in tracers:
        by_face = {
            str(dataset[name].attrs.get("face")): name
            for name in _fields(dataset)
            if dataset[name].attrs.get("total_flux_of") == tracer
        }
        along_x = by_face.get("east") or by_face.get("west")
        along_y = by_face.get("north") or by_face.get("south")
        if along_x and along_y:
            found[tracer] = (along_x, along_y)
    return found


def _upward_velocity(
    table: EnsembleTable, dataset: xr.Dataset, tracer: str, where: object
) -> str | None:
    """Upward velocity the study names, else one with its standard name at known points."""
    named = table.variables.z_velocity
    if named is not None:
        return require_variable(dataset, named, "[ensemble.variables] z_velocity", where)
    for name in _fields(dataset):
        placed = "z_velocity" in table.grid.faces or dataset[name].dims == dataset[tracer].dims
        if placed and dataset[name].attrs.get("standard_name") == UPWARD_STANDARD_NAME:
            return name
    return None


def _known_scalar(dataset: xr.Dataset, part: str) -> str | None:
    """Temperature or salinity by standard name, where a study asks for seawater."""
    for standard_name in SCALAR_STANDARD_NAMES.get(part, ()):
        for name in _fields(dataset):
            if dataset[name].attrs.get("standard_name") == standard_name:
                return name
    return None


def _with_tracer_role(dataset: xr.Dataset, role: str) -> tuple[str, ...]:
    """Names of variables whose attribute ``tracer_role`` says what they serve for."""
    return tuple(
        name for name in _fields(dataset) if dataset[name].attrs.get("tracer_role") == role
    )
