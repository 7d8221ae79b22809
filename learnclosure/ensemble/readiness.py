"""What was understood of an ensemble, and whether a study can run on it."""

from __future__ import annotations

from contextlib import ExitStack
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from learnclosure.ensemble.problems import find_problems
from learnclosure.ensemble.reader import Ensemble, open_ensemble
from learnclosure.ensemble.sources import (
    LEAST_MEMBERS_FOR_HALVES,
    find_files,
    open_members,
)
from learnclosure.errors import InputError
from learnclosure.study import EnsembleTable


@dataclass(frozen=True)
class RoleLine:
    """One variable and the part it plays.

    Attributes
    ----------
    part : str
        Part in the diagnosis.
    variable : str
        Name in the files.
    units_before, units_after : str
        Units in the files and after reading.
    place : str
        Where in the cell it sits in the files.
    """

    part: str
    variable: str
    units_before: str
    units_after: str
    place: str


@dataclass
class Readiness:
    """Everything ``learnclosure inspect`` says of one ensemble.

    Attributes
    ----------
    name : str
    files : list of Path
    facts : dict of str to str
        What was understood, in words, by topic.
    roles : list of RoleLine
    variables : list of str
        Variables found, with dimensions and units; only where a problem stopped reading.
    assumptions : list of str
        What was assumed where neither files nor study say.
    missing : list of str
        What is not there and what cannot be done without it.
    problems : list of str
        What keeps the study from running, one sentence each: all that was found.
    """

    name: str
    files: list[Path] = field(default_factory=list)
    facts: dict[str, str] = field(default_factory=dict)
    roles: list[RoleLine] = field(default_factory=list)
    variables: list[str] = field(default_factory=list)
    assumptions: list[str] = field(default_factory=list)
    missing: list[str] = field(default_factory=list)
    problems: list[str] = field(default_factory=list)

    @property
    def ready(self) -> bool:
        """Whether nothing keeps the study from running."""
        return not self.problems


def inspect_ensemble(table: EnsembleTable, folder: Path | str = ".") -> Readiness:
    """Look at an ensemble without diagnosing it.

    All members are opened and compared, one time of each is read and checked.

    Parameters
    ----------
    table : EnsembleTable
    folder : Path or str, optional
        Folder that relative paths start from.

    Returns
    -------
    Readiness
        Problems are listed in it, not raised.
    """
    start = Path(folder)
    readiness = Readiness(table.name)
    try:
        readiness.files = find_files(table, start)
        with open_ensemble(table, start) as ensemble:
            _describe(readiness, ensemble, table)
            readiness.problems += map(str, ensemble.find_problems(0))
    except InputError as error:
        # What stopped the opening comes first; the same sentence is not said twice.
        found = [str(error), *map(str, find_problems(table, start))]
        readiness.problems += dict.fromkeys(found)
        _list_variables(readiness, table, start)
    return readiness


def _list_variables(readiness: Readiness, table: EnsembleTable, folder: Path) -> None:
    """List what the first file holds, where it can be opened at all."""
    with ExitStack() as stack:
        try:
            dataset = open_members(table, folder, stack)[0].dataset
        except InputError:
            # The problem is in the list already; there is nothing to show beside it.
            return
        for name, variable in dataset.variables.items():
            dims = ", ".join(f"{dim} {variable.sizes[dim]}" for dim in variable.dims)
            units = variable.attrs.get("units")
            readiness.variables.append(f"{name} ({dims})" + (f" [{units}]" if units else ""))


def _range(values: np.ndarray, unit: str, scale: float = 1.0) -> str:
    low, high = float(values.min()) * scale, float(values.max()) * scale
    return f"{low:g} {unit}" if np.isclose(low, high) else f"{low:g} to {high:g} {unit}"


def _describe(readiness: Readiness, ensemble: Ensemble, table: EnsembleTable) -> None:
    grid, geometry = ensemble.grid, ensemble.grid.geometry
    layers, rows, columns = grid.shape
    times = ensemble.times
    spacing = _range(np.diff(times), "days") if len(times) > 1 else "one time"
    wet = geometry.mask.mean(axis=(1, 2))
    axes = [axis for axis in "xy" if getattr(geometry, f"periodic_{axis}")]
    width, height = geometry.dx[geometry.mask[0]], geometry.dy[geometry.mask[0]]
    readiness.facts = {
        "members": f"{len(ensemble.member_labels)} "
        f"({ensemble.member_labels[0]} to {ensemble.member_labels[-1]})",
        "times": f"{len(times)}, {spacing} apart",
        "grid": f"{columns} x {rows} cells, {layers} {grid.vertical}, the top one first",
        "cell width": f"{_range(width, 'km', 1e-3)} along x, {_range(height, 'km', 1e-3)} along y",
        "periodic": " and ".join(axes) or "no axis",
        "sea": ", ".join(f"{share:.1%}" for share in wet) + " of each layer",
        "depth": _range(grid.sea_floor_depth[geometry.mask.any(axis=0)], "m"),
        "Coriolis": f"{_range(grid.coriolis_parameter, 's-1')}, "
        f"beta {_range(grid.planetary_beta_y, 'm-1 s-1')}",
        "dimensions": ", ".join(
            f"{part} = {getattr(ensemble.axes, part) or 'none'}"
            for part in ("time", "layer", "y", "x")
        ),
    }
    readiness.roles = _role_lines(ensemble, table)
    readiness.assumptions = list(ensemble.assumptions)
    if grid.reduced_gravity is None and not ensemble.has_buoyancy and layers > 1:
        readiness.problems.append(
            f"ensemble '{ensemble.name}': the stratification is unknown; name buoyancy, "
            "temperature or reduced_gravity."
        )
    if not ensemble.withheld_tracers:
        readiness.missing.append("withheld tracers: each tracer in turn is left out instead")
    if len(ensemble.member_labels) < LEAST_MEMBERS_FOR_HALVES:
        readiness.missing.append(
            "members: fewer than four give no independent halves, so no ceiling is known"
        )
    if len(ensemble.tracers) < 4:
        readiness.missing.append(
            "tracers: fewer than four are helped out by a pull to the scalar fit"
        )


def _role_lines(ensemble: Ensemble, table: EnsembleTable) -> list[RoleLine]:
    roles = ensemble.roles
    parts = [("x_velocity", roles.x_velocity), ("y_velocity", roles.y_velocity)]
    parts += [("tracer", name) for name in ensemble.tracers]
    parts += [("withheld tracer", name) for name in ensemble.withheld_tracers]
    for part in (
        "z_velocity", "buoyancy", "temperature", "salinity", "potential_vorticity", "thickness",
    ):  # fmt: skip
        name = getattr(roles, part)
        if name is not None:
            parts.append((part, name))
    faces: dict[str, str] = {str(part): face for part, face in table.grid.faces.items()}
    return [
        RoleLine(
            part,
            name,
            ensemble.units_before[name] or "(none)",
            ensemble.units[name],
            faces.get(part, "center"),
        )
        for part, name in parts
    ]
