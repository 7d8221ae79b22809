"""What all members of an ensemble must share: variables, dimensions, grids, times, units."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.ensemble.sources import Member
from learnclosure.errors import GridError, SourceError

MOST_SHOWN = 3
"""Missing times that are written out."""
REMEDY = "give members on one grid with the same times"


def check_members_alike(members: Sequence[Member], fields: Iterable[str], time: str | None) -> None:
    """Refuse members whose fields, coordinates or units differ from the first one's.

    Coordinates must be equal to the last bit: a grid that is shifted, or times that are
    one step late, would be misread silently.

    Parameters
    ----------
    members : sequence of Member
    fields : iterable of str
        Variables that will be read.
    time : str or None
        Time dimension.

    Raises
    ------
    SourceError
        If a variable is missing or has other units.
    GridError
        If dimensions, coordinates or times differ.
    """
    for problem in find_disagreements(members, fields, time):
        raise problem


def find_disagreements(
    members: Sequence[Member], fields: Iterable[str], time: str | None
) -> Iterator[SourceError | GridError]:
    """Find every member that differs from the first one, as ``check_members_alike`` does.

    Parameters
    ----------
    members : sequence of Member
    fields : iterable of str
        Variables that will be read.
    time : str or None
        Time dimension.

    Yields
    ------
    SourceError or GridError
        The first difference of each variable of each member.
    """
    first = members[0]
    names = list(fields)
    dims = sorted({str(dim) for name in names for dim in first.dataset[name].dims})
    for member in _others(members):
        try:
            if time is not None:
                _check_times(first, member, time)
        except GridError as error:
            # Its fields are as long as its times: one sentence is enough.
            yield error
            continue
        for name in names:
            try:
                _check_field(first, member, name)
            except (SourceError, GridError) as error:
                yield error
        for dim in dims:
            if dim not in (member.dimension, time):
                try:
                    _check_values(first, member, dim, "grids", {})
                except GridError as error:
                    yield error


def check_grids_alike(members: Sequence[Member], names: Iterable[str], time: str | None) -> None:
    """Refuse members whose grid variables differ from the first one's.

    Parameters
    ----------
    members : sequence of Member
    names : iterable of str
        Variables the grid was built from.
    time : str or None
        Time dimension; only the first time of a grid variable counts.

    Raises
    ------
    GridError
        If values differ.
    """
    first = members[0]
    for member in _others(members):
        for name in names:
            dims = first.dataset.variables[name].dims
            _check_values(first, member, name, "grids", {time: 0} if time in dims else {})


def _others(members: Sequence[Member]) -> list[Member]:
    """Return the first member of every other dataset."""
    unique = {id(member.dataset): member for member in reversed(members)}
    return [member for member in members[1:] if unique[id(member.dataset)] is member]


def _check_times(first: Member, member: Member, time: str) -> None:
    """Refuse a member with other times; say which it lacks where they can be compared."""
    sizes = [one.dataset.sizes.get(time) for one in (first, member)]
    coordinates = [one.dataset.variables.get(time) for one in (first, member)]
    there, here = coordinates
    if there is None or here is None or there.attrs.get("units") != here.attrs.get("units"):
        if there is not None or here is not None:
            _check_values(first, member, time, "times", {})
        if sizes[1] is not None and sizes[0] != sizes[1]:
            raise GridError(
                "a member has another number of times",
                where=member.where(time),
                found=f"{sizes[1]} times",
                expected=f"{sizes[0]} as in {first.path}",
                remedy=REMEDY,
            )
        return
    lacking = np.setdiff1d(there.values, here.values)
    if lacking.size and np.isin(here.values, there.values).all():
        shown = ", ".join(f"{value:g}" for value in lacking[:MOST_SHOWN].astype(np.float64))
        raise GridError(
            f"a member lacks {lacking.size} of {there.size} times",
            where=member.where(time),
            found=f"none at {shown}{', ...' if lacking.size > MOST_SHOWN else ''}",
            expected=f"every time of {first.path}",
            remedy="add the missing times, or remove them from all members",
        )
    _check_values(first, member, time, "times", {})


def _check_field(first: Member, member: Member, name: str) -> None:
    if name not in member.dataset.variables:
        raise SourceError(
            "a variable is missing",
            where=member.where(name),
            expected=f"the variables of {first.path}",
            remedy="repair or remove this member",
        )
    here, there = member.dataset.variables[name], first.dataset.variables[name]
    own = {str(dim): size for dim, size in here.sizes.items() if dim != member.dimension}
    other = {str(dim): size for dim, size in there.sizes.items() if dim != first.dimension}
    if list(own.items()) != list(other.items()):
        raise GridError(
            "members differ in their dimensions",
            where=member.where(name),
            found=own,
            expected=f"{other} as in {first.path}",
            remedy=REMEDY,
        )
    if here.attrs.get("units") != there.attrs.get("units"):
        raise SourceError(
            "members differ in their units",
            where=member.where(name),
            found=repr(here.attrs.get("units")),
            expected=f"{there.attrs.get('units')!r} as in {first.path}",
            remedy="give all members in one unit",
        )


def _check_values(
    first: Member, member: Member, name: str, what: str, place: dict[Any, int]
) -> None:
    there: xr.Variable | None = first.dataset.variables.get(name)
    here: xr.Variable | None = member.dataset.variables.get(name)
    if there is None and here is None:
        return
    if there is None or here is None:
        found = "no such variable"
    else:
        ours, theirs = here.isel(place).values, there.isel(place).values
        same_units = here.attrs.get("units") == there.attrs.get("units")
        if same_units and np.array_equal(ours, theirs, equal_nan=ours.dtype.kind == "f"):
            return
        found = _difference(ours, theirs) if same_units else repr(here.attrs.get("units"))
    raise GridError(
        f"members lie on different {what}" if what == "grids" else "members have different times",
        where=member.where(name),
        found=found,
        expected=f"what {first.path} has",
        remedy=REMEDY,
    )


def _difference(here: npt.NDArray[Any], there: npt.NDArray[Any]) -> str:
    if here.shape != there.shape:
        return f"shape {here.shape}, not {there.shape}"
    gap = np.abs(np.asarray(here, float) - np.asarray(there, float))
    known = gap[np.isfinite(gap)]
    return f"values that differ by up to {known.max():g}" if known.size else "other missing values"
