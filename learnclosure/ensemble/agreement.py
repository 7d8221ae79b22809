"""What all members of an ensemble must share: variables, dimensions, grids, times, units."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.ensemble.sources import Member
from learnclosure.errors import GridError, SourceError

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
    first = members[0]
    names = list(fields)
    dims = sorted({str(dim) for name in names for dim in first.dataset[name].dims})
    for member in _others(members):
        for name in names:
            _check_field(first, member, name)
        for dim in dims:
            if dim != member.dimension:
                what = "times" if dim == time else "grids"
                _check_values(first, member, dim, what, {})


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
