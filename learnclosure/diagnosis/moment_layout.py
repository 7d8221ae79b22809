"""Which fields and products the moments hold, in which order."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.kernel_parts import Plan, Rows
from learnclosure.diagnosis.moment_types import IndexArray
from learnclosure.ensemble.protocol import EnsembleSource
from learnclosure.ensemble.sources import LEAST_MEMBERS_FOR_HALVES

HORIZONTAL = ("x_velocity", "y_velocity")
UPWARD = "z_velocity"
THICKNESS = "thickness"
MOST_GROUPS = 16
GROUPS_OF_MANY = 12
"""Groups of more members than ``MOST_GROUPS``; even, so that each lies in one half."""
WEIGHTINGS = {"even": 0, "thickness": 1, "where thick": 2}

Pair = tuple[str, str]


def group_sizes(members: int) -> IndexArray:
    """Share members out over groups: member ``i`` is in group ``i % groups``.

    Parameters
    ----------
    members : int

    Returns
    -------
    ndarray of int
        Members of each group. Up to 16 members are groups of their own; the delete-a-group
        jackknife takes over from there (Shao and Wu 1989, Annals of Statistics 17,
        1176-1197, section 2; from memory).
    """
    groups = members if members <= MOST_GROUPS else GROUPS_OF_MANY
    return np.array([len(range(group, members, groups)) for group in range(groups)])


@dataclass(frozen=True)
class Layout:
    """Names of what one kernel call sums.

    Attributes
    ----------
    scalars : tuple of str
        Fields whose eddy flux is wanted.
    within : tuple of str
        Fields that hold a part of a horizontal flux already, to be averaged and added.
    velocities : tuple of str
    others : tuple of str
        Fields of which only the mean is wanted.
    varying : tuple of str
        Scalars whose variance is wanted.
    weighting : {"even", "thickness", "where thick"}
    """

    scalars: tuple[str, ...]
    within: tuple[str, ...]
    velocities: tuple[str, ...]
    others: tuple[str, ...]
    varying: tuple[str, ...]
    weighting: str

    @cached_property
    def fields(self) -> tuple[str, ...]:
        """All fields; those kept for each group of members come first."""
        return (*self.scalars, *self.within, *self.velocities, *self.others)

    @property
    def kept_fields(self) -> int:
        """How many fields are kept for each group."""
        return len(self.scalars) + len(self.within)

    @property
    def kept_pairs(self) -> int:
        """How many products are kept for each group: the horizontal fluxes."""
        return len(HORIZONTAL) * len(self.scalars)

    @cached_property
    def pairs(self) -> tuple[Pair, ...]:
        """All products; those kept for each group come first."""
        horizontal = [(axis, name) for name in self.scalars for axis in HORIZONTAL]
        upward = [(UPWARD, name) for name in self.scalars if UPWARD in self.velocities]
        return (*horizontal, *upward, *MOMENTUM, *((name, name) for name in self.varying))

    def within_name(self, pair: Pair) -> str | None:
        """Return the field that holds a part of a covariance already, if there is one."""
        name = f"{pair[1]}_within_{pair[0].partition('_')[0]}"
        return name if name in self.fields else None

    def plan(self, members: int, factor: int, *, split: bool = True) -> Plan:
        """Return the plan of a kernel call.

        Parameters
        ----------
        members : int
            Members, or times where departures are from a mean over time.
        factor : int
            Cells per coarse cell along x and y.
        split : bool, optional
            Whether halves and groups of members are wanted.
        """
        leads = (*self.velocities, *self.varying)
        place = {name: number for number, name in enumerate(self.fields)}
        sizes = group_sizes(members) if split else np.array([members])
        return Plan(
            leads=np.array([place[name] for name in leads]),
            pair_lead=np.array([leads.index(first) for first, _ in self.pairs]),
            pair_field=np.array([place[second] for _, second in self.pairs]),
            sizes=sizes,
            kept_fields=self.kept_fields,
            kept_pairs=self.kept_pairs,
            halves=split and has_halves(members),
            left_out=split and members - int(sizes.max()) >= 2,
            weighting=WEIGHTINGS[self.weighting],
            thickness=place.get(THICKNESS, 0),
            factor=factor,
        )


MOMENTUM: tuple[Pair, ...] = (
    ("x_velocity", "x_velocity"),
    ("x_velocity", "y_velocity"),
    ("y_velocity", "y_velocity"),
)


def has_halves(members: int) -> bool:
    """Tell whether each of two halves has eddies of its own."""
    return members >= LEAST_MEMBERS_FOR_HALVES


def layouts_of(source: EnsembleSource, names: Iterable[str]) -> dict[str, Layout]:
    """Find what is to be summed.

    Parameters
    ----------
    source : EnsembleSource
    names : iterable of str
        Fields at hand.

    Returns
    -------
    dict of str to Layout
        ``moments``, and ``bolus`` where averages are weighted by thickness: plain moments
        of velocity and thickness where the layer is there.
    """
    known = tuple(names)
    weighted = bool(getattr(source, "weighted", False))
    active = tuple(name for name in source.active if name in known)
    if weighted:
        active = tuple(name for name in active if name != THICKNESS)
    scalars = tuple(dict.fromkeys((*source.tracers, *source.withheld_tracers, *active)))
    velocities = tuple(name for name in (*HORIZONTAL, UPWARD) if name in known)
    parts = [f"{name}_within_{axis}" for name in scalars for axis in "xy"]
    within = tuple(name for name in parts if name in known)
    taken = {*scalars, *velocities, *within}
    moments = Layout(
        scalars=scalars,
        within=within,
        velocities=velocities,
        others=tuple(
            name for name in known if name not in taken and not name.startswith(THICKNESS + "_")
        ),
        varying=active,
        weighting="thickness" if weighted else "even",
    )
    if not weighted:
        return {"moments": moments}
    parts = [f"{THICKNESS}_within_{axis}" for axis in "xy"]
    within = tuple(name for name in parts if name in known)
    bolus = Layout((THICKNESS,), within, HORIZONTAL, (), (THICKNESS,), "where thick")
    return {"moments": moments, "bolus": bolus}


def rows_of(fields: Mapping[str, npt.NDArray[Any]], names: Iterable[str]) -> tuple[Rows, list[Any]]:
    """Find where fields lie in memory.

    Parameters
    ----------
    fields : mapping of str to ndarray, shape (member, layer, y, x)
    names : iterable of str
        Fields wanted, in order.

    Returns
    -------
    Rows
    list of ndarray
        What must stay alive while the rows are used.
    """
    planes, single, alive = [], [], []
    for name in names:
        values = fields[name]
        if values.dtype not in (np.float32, np.float64) or not values.dtype.isnative:
            values = values.astype(np.float64)
        if values.strides[-1] != values.itemsize or (
            values.strides[-2] != values.itemsize * values.shape[-1]
        ):
            values = np.ascontiguousarray(values)
        members, layers = values.shape[:2]
        offset = np.add.outer(
            np.arange(members) * values.strides[0], np.arange(layers) * values.strides[1]
        )
        planes.append(values.__array_interface__["data"][0] + offset)
        single.append(values.dtype == np.float32)
        alive.append(values)
    return Rows(np.stack(planes).astype(np.int64), np.array(single), alive[0].shape[-1]), alive
