"""An open ensemble: members on one grid, read one time after another, in SI units."""

from __future__ import annotations

from contextlib import ExitStack
from functools import cached_property
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.ensemble.axes import check_faces, find_axes, to_centres
from learnclosure.ensemble.grid import Grid
from learnclosure.ensemble.layout import LayoutReader, build_grid
from learnclosure.ensemble.roles import find_roles
from learnclosure.ensemble.sources import Member, content_digest, find_files, open_members
from learnclosure.ensemble.stratification import buoyancy_rule
from learnclosure.ensemble.units import Conversion, conversion, tracer_conversion
from learnclosure.errors import GridError, SourceError
from learnclosure.study import EnsembleTable

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

SECONDS_PER_DAY = 86400.0
BLOCK_BYTES = 64e6


class Ensemble:
    """One region's members, opened lazily. Use it in a ``with`` statement.

    Attributes
    ----------
    name : str
        Name of the region.
    split : {"train", "test"}
    grid : Grid
    roles : Roles
        Names of the variables in the files.
    member_labels : tuple of int or str
    times : ndarray, shape (time,), days
    tracers, withheld_tracers : tuple of str
    units : dict of str to str
        SI units of what ``fields`` returns.
    units_before : dict of str to str
        Units in the files.
    has_buoyancy : bool
    assumptions : tuple of str
        What was assumed where neither files nor study say.
    """

    def __init__(self, table: EnsembleTable, folder: Path) -> None:
        self.name = table.name
        self.split: str = table.split
        self._table = table
        self._folder = folder
        self._stack = ExitStack()
        self._block: dict[tuple[int | str, str], npt.NDArray[Any]] = {}
        self._block_start = -1
        try:
            self._open(table, folder)
        except BaseException:
            self._stack.close()
            raise

    def _open(self, table: EnsembleTable, folder: Path) -> None:
        self.members = open_members(table, folder, self._stack)
        first = self.members[0]
        self.roles = find_roles(table, first.dataset, first.path)
        self.tracers = self.roles.tracers
        self.withheld_tracers = self.roles.withheld_tracers
        self.axes = find_axes(table, first.dataset, self.tracers[0], first.dimension, first.path)
        check_faces(table.grid, first.dataset, self.roles, self.axes, first.path)
        self._check_alike()
        layout = LayoutReader(table, first.dataset, self.axes, first.path)
        self._top_last = layout.top_last()
        self._periodic = layout.periodic()
        self._conversions, self.units_before = self._find_units(first)
        self.units = {name: change.units for name, change in self._conversions.items()}
        self.times = self._read_times(first)
        self.grid: Grid = build_grid(layout, self._find_mask(first), self._top_last)
        self.member_labels = tuple(member.label for member in self.members)
        notes = list(dict.fromkeys(layout.assumptions))
        self._buoyancy_rule = buoyancy_rule(table, self.roles, self.grid, notes)
        self.has_buoyancy = self.roles.buoyancy is not None or self._buoyancy_rule is not None
        self.assumptions = tuple(notes)

    def __enter__(self) -> Ensemble:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Close all files."""
        self._stack.close()

    @cached_property
    def input_sha256(self) -> str:
        """SHA-256 over names and contents of all files."""
        return content_digest(find_files(self._table, self._folder))

    @property
    def _stratifying(self) -> dict[str, str]:
        """Variables the stratification comes from, by part."""
        if self.roles.buoyancy is not None:
            return {"buoyancy": self.roles.buoyancy}
        parts = {"temperature": self.roles.temperature, "salinity": self.roles.salinity}
        return {part: name for part, name in parts.items() if name is not None}

    @property
    def variable_names(self) -> tuple[str, ...]:
        """All variables read, by their names in the files, each once."""
        names = (
            self.roles.x_velocity,
            self.roles.y_velocity,
            *self.tracers,
            *self.withheld_tracers,
            *self._stratifying.values(),
        )
        return tuple(dict.fromkeys(names))

    def fields(self, time: int) -> dict[str, FloatArray]:
        """Read all members of one time.

        Parameters
        ----------
        time : int
            Number of the time.

        Returns
        -------
        dict of str to ndarray, shape (member, layer, y, x)
            ``x_velocity`` and ``y_velocity`` at cell centres in m s-1, every tracer under
            its own name, and ``buoyancy`` in m s-2 if the ensemble has it; the top layer
            first, zero on land.

        Raises
        ------
        SourceError
            If a value in the sea is missing or a file cannot be read.
        """
        found: dict[str, list[FloatArray]] = {}
        for member in self.members:
            for name, values in self._member_fields(member, time).items():
                found.setdefault(name, []).append(values)
        return {name: np.stack(values) for name, values in found.items()}

    def _member_fields(self, member: Member, time: int) -> dict[str, FloatArray]:
        result: dict[str, FloatArray] = {}
        mask = self.grid.geometry.mask
        rows, columns = mask.shape[1:]
        for part, size, periodic in (
            ("x_velocity", columns, self._periodic[0]),
            ("y_velocity", rows, self._periodic[1]),
        ):
            name = getattr(self.roles, part)
            face = self._table.grid.faces.get(part)  # type: ignore[call-overload]
            values = self._read(member, name, time)
            if face in (None, "center"):
                self._require_sea(values, member, name, time)
            centred = to_centres(values, face, size, periodic)
            result[part] = np.where(mask, self._conversions[name](centred), 0.0)
        raw: dict[str, FloatArray] = {}
        for name in (*self.tracers, *self.withheld_tracers, *self._stratifying.values()):
            if name not in raw:
                raw[name] = self._scalar(member, name, time)
        for name in (*self.tracers, *self.withheld_tracers):
            result[name] = raw[name]
        if self.has_buoyancy:
            parts = {part: raw[name] for part, name in self._stratifying.items()}
            result["buoyancy"] = self._buoyancy(parts)
        return result

    def _scalar(self, member: Member, name: str, time: int) -> FloatArray:
        values = self._read(member, name, time)
        self._require_sea(values, member, name, time)
        return np.where(self.grid.geometry.mask, self._conversions[name](values), 0.0)

    def _buoyancy(self, parts: dict[str, FloatArray]) -> FloatArray:
        if self._buoyancy_rule is None:
            return parts["buoyancy"]
        values = self._buoyancy_rule(parts["temperature"], parts.get("salinity"))
        return np.where(self.grid.geometry.mask, values, 0.0)

    def _read(self, member: Member, name: str, time: int) -> FloatArray:
        """Read one field of one member, (layer, y, x), the top layer first."""
        if self.axes.time is None:
            values = self._load(member, name, None)
        else:
            start = time - time % self._block_times
            if start != self._block_start:
                self._block.clear()
                self._block_start = start
            key = (member.label, name)
            if key not in self._block:
                self._block[key] = self._load(member, name, slice(start, start + self._block_times))
            values = self._block[key][time - start]
        values = values.astype(np.float64)
        if self.axes.layer is None:
            values = values[None]
        return values[::-1] if self._top_last else values

    def _load(self, member: Member, name: str, times: slice | None) -> npt.NDArray[Any]:
        """Read one variable of one member at some times, in the files' own precision."""
        variable = member.dataset.variables[name]
        place: dict[str, Any] = {}
        if self.axes.time is not None and times is not None:
            place[self.axes.time] = times
        if member.dimension is not None:
            place[member.dimension] = member.index
        try:
            return np.asarray(variable.isel(place).values)
        except (OSError, ValueError, RuntimeError, KeyError) as error:
            raise SourceError(
                f"cannot be read: {str(error).splitlines()[0]}",
                where=member.where(name),
                remedy="replace the file; it may be cut short or damaged",
            ) from None

    @cached_property
    def _block_times(self) -> int:
        """Times read at once: opening a variable costs more than reading a small field."""
        variable = self.members[0].dataset[self.tracers[0]]
        count = variable.sizes[self.axes.time] if self.axes.time is not None else 1
        one = variable.nbytes / max(count, 1) * len(self.variable_names)
        if self.members[0].dimension is None:
            one *= len(self.members)
        return int(max(1, min(count, BLOCK_BYTES // max(one, 1))))

    def _require_sea(self, values: FloatArray, member: Member, name: str, time: int) -> None:
        missing = int(np.count_nonzero(self.grid.geometry.mask & ~np.isfinite(values)))
        if missing:
            raise SourceError(
                "values are missing in the sea",
                where=member.where(name),
                found=f"{missing} that are not finite at time number {time}",
                expected="finite values wherever the tracers are sea",
                remedy="repair the file, or mask the same cells in all members and times",
            )

    def _find_mask(self, first: Member) -> BoolArray:
        """Sea is where any tracer of the first member has a value at the first time."""
        fields = [np.isfinite(self._read(first, name, 0)) for name in self.tracers]
        return np.asarray(np.any(fields, axis=0))

    def _find_units(self, first: Member) -> tuple[dict[str, Conversion], dict[str, str]]:
        velocities = (self.roles.x_velocity, self.roles.y_velocity)
        wanted = dict.fromkeys(velocities, "m s-1")
        kinds = {"buoyancy": "m s-2", "temperature": "K", "salinity": "g kg-1"}
        tracers = (*self.tracers, *self.withheld_tracers)
        for part, name in self._stratifying.items():
            if name not in tracers:
                wanted[name] = kinds[part]
        found: dict[str, Conversion] = {}
        before: dict[str, str] = {}
        for name in self.variable_names:
            said = str(first.dataset[name].attrs.get("units", ""))
            before[name] = said
            if name in wanted:
                found[name] = conversion(said, wanted[name], first.where(name))
            else:
                found[name] = tracer_conversion(said, first.where(name))
        return found, before

    def _read_times(self, first: Member) -> FloatArray:
        name = self.axes.time
        if name is None:
            return np.zeros(1)
        count = first.dataset.sizes[name]
        if name not in first.dataset.variables:
            return np.arange(count, dtype=np.float64)
        variable = first.dataset[name]
        unit = str(variable.attrs.get("units", "days")).split(" since ")[0]
        change = conversion(unit, "s", first.where(name))
        return change(np.asarray(variable.values, dtype=np.float64)) / SECONDS_PER_DAY

    def _check_alike(self) -> None:
        """Refuse members whose variables, grid or times differ from the first one's."""
        first = self.members[0]
        for member in self.members[1:]:
            if member.dataset is first.dataset:
                continue
            for name in self.variable_names:
                self._check_variable(first, member, name)
            for name in {
                str(dim) for var in self.variable_names for dim in first.dataset[var].dims
            }:
                if name == member.dimension:
                    continue
                _check_coordinate(first, member, name)

    def _check_variable(self, first: Member, member: Member, name: str) -> None:
        if name not in member.dataset.variables:
            raise SourceError(
                "a variable is missing",
                where=member.where(name),
                expected=f"the variables of {first.path}",
                remedy="repair or remove this member",
            )
        here, there = member.dataset[name], first.dataset[name]
        if here.dims != there.dims or any(
            here.sizes[dim] != there.sizes[dim] for dim in here.dims if dim != member.dimension
        ):
            kind = GridError if here.dims == there.dims else SourceError
            raise kind(
                "members differ in their dimensions",
                where=member.where(name),
                found=dict(here.sizes),
                expected=f"{dict(there.sizes)} as in {first.path}",
                remedy="give members on one grid with the same times",
            )
        if here.attrs.get("units") != there.attrs.get("units"):
            raise SourceError(
                "members differ in their units",
                where=member.where(name),
                found=repr(here.attrs.get("units")),
                expected=f"{there.attrs.get('units')!r} as in {first.path}",
                remedy="give all members in one unit",
            )


def _check_coordinate(first: Member, member: Member, name: str) -> None:
    """Refuse a coordinate that differs at all: a shifted grid would be misread silently."""
    if name not in first.dataset.variables:
        return
    here: xr.Variable | None = member.dataset.variables.get(name)
    there = first.dataset.variables[name]
    if here is None or not np.array_equal(here.values, there.values, equal_nan=True):
        what = "grids" if np.ndim(there.values) and "time" not in name.lower() else "times"
        raise GridError(
            f"members lie on different {what}",
            where=member.where(name),
            found="no such coordinate" if here is None else _largest_difference(here, there),
            expected=f"the values in {first.path}",
            remedy="give members on one grid with the same times",
        )


def _largest_difference(here: xr.Variable, there: xr.Variable) -> str:
    difference = np.abs(np.asarray(here.values, float) - np.asarray(there.values, float))
    return f"values that differ by up to {np.nanmax(difference):g}"


def open_ensemble(table: EnsembleTable, folder: Path | str = ".") -> Ensemble:
    """Open the ensemble of one region.

    Parameters
    ----------
    table : EnsembleTable
        One ``[[ensemble]]`` table of a study.
    folder : Path or str, optional
        Folder that relative paths start from.

    Returns
    -------
    Ensemble
        To be closed, or used in a ``with`` statement.

    Raises
    ------
    InputError
        If files, roles, units or grid cannot be understood.
    """
    return Ensemble(table, Path(folder))
