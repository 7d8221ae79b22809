"""What counts as an eddy: departures from the ensemble, the coarse grid or the time mean."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from typing import NamedTuple

import numpy as np

from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.kernels import add_moments
from learnclosure.diagnosis.moment_layout import (
    Layout,
    group_sizes,
    has_halves,
    layouts_of,
    rows_of,
)
from learnclosure.diagnosis.moment_sums import Finisher, MomentState
from learnclosure.diagnosis.moment_types import (
    Definition,
    Fields,
    FloatArray,
    Moments,
    PartialSource,
)
from learnclosure.diagnosis.subgrid import block_fields
from learnclosure.ensemble.protocol import EnsembleSource
from learnclosure.errors import DiagnosisError

TIME_BLOCKS = 4
"""Consecutive blocks of time whose moments are kept apart, to see what more times give."""
CHUNK_TIMES = 8
"""Times summed together before they are merged: fixed, so that rounding never depends on who
sums what."""
BAND_BYTES = 64e6
"""Bytes of the fields looked at together, in double precision."""
ALL = slice(None)


class Chunk(NamedTuple):
    """What is summed together: some times of one block, or some members over all times."""

    block: int
    start: int
    stop: int


def describe(definition: Definition, weighted: bool, cell: str) -> str:
    """Say in a sentence what counts as an eddy.

    Parameters
    ----------
    definition : {"ensemble", "ensemble-subgrid", "time"}
    weighted : bool
        Whether averages are weighted by thickness.
    cell : {"layer", "level"}

    Returns
    -------
    str
    """
    what = {
        "ensemble": "departure from the ensemble mean of the same time",
        "ensemble-subgrid": (
            "departure from the ensemble mean of the same time, coarse-grained: total flux on "
            "the coarse grid minus the flux of coarse-grained ensemble means"
        ),
        "time": "departure of each member from its own time mean, averaged over members",
    }[definition]
    average = "thickness-weighted" if weighted else "Reynolds"
    return f"{what}; {average} average in each {cell}"


class Accumulation:
    """The sums of one ensemble under one definition of eddies, chunk by chunk.

    Parameters
    ----------
    source : EnsembleSource
    coarsening : Coarsening
    definition : {"ensemble", "ensemble-subgrid", "time"}
    """

    def __init__(
        self, source: EnsembleSource, coarsening: Coarsening, definition: Definition
    ) -> None:
        self.source = source
        self.coarsening = coarsening
        self.definition = definition
        self.members, self.times = len(source.member_labels), len(source.times)
        if definition == "time" and self.times < 2:
            raise DiagnosisError(
                "one time has no eddies about a time mean",
                where=f"region '{source.name}'",
                found="one time",
                expected="at least 2 times",
                remedy="choose eddies = 'ensemble' under [diagnosis]",
            )
        geometry = coarsening.grid.geometry
        self.area = np.where(geometry.mask, geometry.area, 0.0)

    @property
    def block_times(self) -> tuple[int, ...]:
        """Number of times of each block."""
        if self.definition == "time":
            return (self.times,)
        blocks = min(TIME_BLOCKS, self.times)
        owner = np.arange(self.times) * blocks // self.times
        return tuple(int(count) for count in np.bincount(owner))

    def chunks(self) -> list[Chunk]:
        """Share the work out, in the order in which its sums are merged."""
        if self.definition == "time":
            return [Chunk(0, member, member + 1) for member in range(self.members)]
        found, first = [], 0
        for block, count in enumerate(self.block_times):
            found += [
                Chunk(block, start, min(start + CHUNK_TIMES, first + count))
                for start in range(first, first + count, CHUNK_TIMES)
            ]
            first += count
        return found

    def run(self, chunk: Chunk, progress: Callable[[float], None] | None = None) -> MomentState:
        """Sum one chunk.

        Parameters
        ----------
        chunk : Chunk
        progress : callable, optional
            Called with the share of the chunk done.

        Returns
        -------
        MomentState

        Raises
        ------
        DiagnosisError
            If values are missing where none may be.
        """
        state = MomentState({})
        bands = list(self._bands())
        for number, rows in enumerate(bands):
            steps = self._over_time if self.definition == "time" else self._over_members
            for share in steps(chunk, rows, state):
                if progress is not None:
                    progress((number + share) / len(bands))
        return state

    def finish(self, state: MomentState) -> Moments:
        """Turn the merged sums of all chunks to moments."""
        finisher = Finisher(
            layouts_of(self.source, state.fields),
            self.coarsening.sea_area,
            self.members,
            self.times,
            over_time=self.definition == "time",
        )
        return finisher.finish(state, self.block_times)

    def _bands(self) -> Iterator[slice]:
        """Bands of rows that are looked at together."""
        layers, rows, columns = self.coarsening.grid.shape
        factor = self.coarsening.factor
        band = rows
        if isinstance(self.source, PartialSource):
            count = self.times if self.definition == "time" else self.members
            fields = 4 + len(self.source.tracers) + len(self.source.withheld_tracers)
            most = int(BAND_BYTES // (8 * count * fields * layers * columns))
            band = min(rows, max(1, most // factor) * factor)
        for start in range(0, rows, band):
            yield slice(start, min(start + band, rows))

    def _read(self, time: int, members: slice, rows: slice) -> Fields:
        if isinstance(self.source, PartialSource):
            return self.source.fields_of(time, members, rows)
        fields = self.source.fields(time)
        return {name: values[members, :, rows] for name, values in fields.items()}

    def _over_members(self, chunk: Chunk, rows: slice, state: MomentState) -> Iterator[float]:
        part = Coarsening(self.coarsening.grid.of_rows(rows), self.coarsening.factor)
        for time in range(chunk.start, chunk.stop):
            fields = self._read(time, ALL, rows)
            by_layout, factor, area = {"moments": fields, "bolus": fields}, part.factor, self.area
            area = area[:, rows]
            if self.definition == "ensemble-subgrid":
                layout = layouts_of(self.source, fields)["moments"]
                by_layout, factor, area = block_fields(fields, layout, part), 1, part.sea_area
            layouts = layouts_of(self.source, by_layout["moments"])
            for name, layout in layouts.items():
                targets = self._targets(state, name, layout, chunk.block)
                self._add(
                    by_layout[name], layout, factor, area, rows, targets, f"time number {time}"
                )
            yield (time - chunk.start + 1) / (chunk.stop - chunk.start)
            state.fields = tuple(by_layout["moments"])

    def _over_time(self, chunk: Chunk, rows: slice, state: MomentState) -> Iterator[float]:
        area = self.area[:, rows]
        member = chunk.start
        read: dict[str, list[FloatArray]] = {}
        for time in range(self.times):
            for name, values in self._read(time, slice(member, member + 1), rows).items():
                read.setdefault(name, []).append(values[0])
            yield 0.9 * (time + 1) / self.times
        fields: Fields = {name: np.stack(values) for name, values in read.items()}
        for name, layout in layouts_of(self.source, fields).items():
            own = MomentState({})
            targets = self._targets(own, name, layout, 0, split=False)
            self._add(
                fields, layout, self.coarsening.factor, area, rows, targets,
                f"member {self.source.member_labels[member]}", split=False,
            )  # fmt: skip
            self._share(name, layout, member, targets[0], state)
        state.fields = tuple(fields)
        yield 1.0

    def _add(
        self, fields: Fields, layout: Layout, factor: int, area: FloatArray, rows: slice,
        targets: tuple[FloatArray, ...], where: str, *, split: bool = True,
    ) -> None:  # fmt: skip
        lines, alive = rows_of(fields, layout.fields)
        plan = layout.plan(lines.planes.shape[1], factor, split=split)
        first = rows.start // self.coarsening.factor
        missing = add_moments(lines, plan, np.ascontiguousarray(area), first, *targets)
        del alive
        if missing and not getattr(self.source, "gaps", False):
            raise DiagnosisError(
                "values are missing in the sea",
                where=f"region '{self.source.name}'",
                found=f"{missing} that are not finite, or thicknesses below zero, at {where}",
                expected="finite values wherever the mask has sea",
                remedy="repair the files, or mask the same cells in all members, times and fields",
            )

    def _targets(
        self, state: MomentState, name: str, layout: Layout, block: int, *, split: bool = True
    ) -> tuple[FloatArray, ...]:
        """Return the sums a kernel call adds to; those nobody asks for are not kept."""
        space = self.coarsening.sea_area.shape
        channels = (2 + len(layout.fields) + len(layout.pairs), *space)
        groups = len(group_sizes(self.members)) if split else 1
        kept = (1 + layout.kept_fields + layout.kept_pairs, *space)
        halves = split and has_halves(self.members)
        unkept = MomentState({})
        return (
            state.of(f"{name}.whole", channels),
            (state if halves else unkept).of(f"{name}.halves.{block}", (2, *channels)),
            (state if split else unkept).of(f"{name}.groups", (groups, *kept)),
            (state if split and self._leaves_out else unkept).of(
                f"{name}.left", (groups, 1 + layout.kept_pairs, *space)
            ),
        )

    @property
    def _leaves_out(self) -> bool:
        rest = self.members - int(group_sizes(self.members).max())
        return rest >= (1 if self.definition == "time" else 2)

    def _share(
        self, name: str, layout: Layout, member: int, own: FloatArray, state: MomentState
    ) -> None:
        """Add what one member gave over time to the whole, its half and the groups."""
        targets = self._targets(state, name, layout, 0)
        sizes = group_sizes(self.members)
        group, half = member % len(sizes), member % 2
        targets[0][:] += own / self.members
        in_half = len(range(half, self.members, 2))
        targets[1][half] += own / in_half
        first, pairs = 2 + len(layout.fields), layout.kept_pairs
        kept = [own[:1], own[2 : 2 + layout.kept_fields], own[first : first + pairs]]
        targets[2][group] += np.concatenate(kept) / sizes[group]
        left = np.concatenate([own[1:2], own[first : first + pairs]])
        for other, size in enumerate(sizes):
            if other != group:
                targets[3][other] += left / (self.members - size)
