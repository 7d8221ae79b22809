"""All that is wrong with an ensemble that cannot be opened, not only the first of it."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import replace
from pathlib import Path

import xarray as xr

from learnclosure.ensemble.agreement import find_disagreements
from learnclosure.ensemble.axes import find_axes
from learnclosure.ensemble.conversions import find_conversions
from learnclosure.ensemble.roles import Roles, find_roles, require_variable
from learnclosure.ensemble.sources import Member, find_files, open_dataset, open_members
from learnclosure.errors import InputError
from learnclosure.study import EnsembleTable


def find_problems(table: EnsembleTable, folder: Path) -> Iterator[InputError]:
    """Find the problems of an ensemble that do not depend on each other.

    Patterns, files, roles, units and members are each looked at by themselves; what needs
    a part that is wrong is left out.

    Parameters
    ----------
    table : EnsembleTable
    folder : Path
        Folder that relative paths start from.

    Yields
    ------
    InputError
    """
    with ExitStack() as stack:
        unreadable = False
        for problem in _file_problems(table, folder, stack):
            unreadable = True
            yield problem
        if unreadable:
            return
        try:
            members = open_members(table, folder, stack)
        except InputError as error:
            yield error
            return
        roles: Roles | None = None
        for found in _role_problems(table, members[0].dataset, members[0].path):
            if isinstance(found, Roles):
                roles = found
            else:
                yield found
        if roles is not None:
            yield from _field_problems(table, members, roles)


def _file_problems(table: EnsembleTable, folder: Path, stack: ExitStack) -> Iterator[InputError]:
    """Find patterns without a match and files that cannot be opened."""
    for pattern in table.patterns:
        try:
            paths = find_files(table.model_copy(update={"files": pattern}), folder)
        except InputError as error:
            yield error
            continue
        for path in paths:
            try:
                open_dataset(path, stack)
            except InputError as error:
                yield error


def _role_problems(
    table: EnsembleTable, dataset: xr.Dataset, where: Path
) -> Iterator[InputError | Roles]:
    """Find variables that are named but missing, then what else the roles lack.

    The roles themselves come last, if they can be told.
    """
    names = table.variables
    parts = [
        *((part, getattr(names, part)) for part in ("x_velocity", "y_velocity")),
        *(("tracers", name) for name in names.tracers or ()),
        *(("withheld_tracers", name) for name in names.withheld_tracers),
        *((part, getattr(names, part)) for part in ("buoyancy", "temperature", "salinity")),
    ]
    said: set[str] = set()
    for part, name in parts:
        if name is None:
            continue
        try:
            key = part if part.endswith("velocity") else f"[ensemble.variables] {part}"
            require_variable(dataset, name, key, where)
        except InputError as error:
            said.add(str(error))
            yield error
    try:
        yield find_roles(table, dataset, where)
    except InputError as error:
        if str(error) not in said:
            yield error


def _field_problems(
    table: EnsembleTable, members: list[Member], roles: Roles
) -> Iterator[InputError]:
    """Find units that cannot be understood and members that differ from the first."""
    first = members[0]
    said: set[str] = set()
    single = replace(roles, buoyancy=None, temperature=None, salinity=None, withheld_tracers=())
    for name in (*roles.tracers, *roles.withheld_tracers):
        try:
            find_conversions(replace(single, tracers=(name,)), first, [])
        except InputError as error:
            if str(error) not in said:
                said.add(str(error))
                yield error
    try:
        axes = find_axes(table, first.dataset, roles.tracers[0], first.dimension, first.path)
    except InputError as error:
        yield error
        return
    yield from find_disagreements(members, roles.fields, axes.time)
