"""An open ensemble: members on one grid, read one time after another, in SI units."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import ExitStack
from dataclasses import replace
from functools import cached_property
from pathlib import Path
from types import TracebackType
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.active import check_thickness, interface_height, left_out_gradients
from learnclosure.ensemble.agreement import check_grids_alike, check_members_alike
from learnclosure.ensemble.assembly import build_grid
from learnclosure.ensemble.axes import (
    ALONG,
    Cells,
    between_cells,
    check_points,
    find_axes,
    to_centres,
)
from learnclosure.ensemble.conversions import find_conversions, read_times
from learnclosure.ensemble.grid import Grid
from learnclosure.ensemble.layout import LayoutReader
from learnclosure.ensemble.roles import find_roles
from learnclosure.ensemble.seawater import EquationOfState
from learnclosure.ensemble.sources import (
    Member,
    content_digest,
    find_files,
    first_line,
    open_members,
)
from learnclosure.ensemble.stored import Band, StoredVariables, band_of
from learnclosure.ensemble.stratification import buoyancy_rule
from learnclosure.ensemble.total_flux import TotalFlux, find_total_fluxes
from learnclosure.ensemble.upward import needed_faces, upward_at_centres, upward_notes
from learnclosure.ensemble.vertical import is_top_last
from learnclosure.errors import SourceError
from learnclosure.study import EnsembleTable

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

BLOCK_BYTES = 128e6
"""Bytes kept of the files at a time, in their own precision."""


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
    active : tuple of str
        Fields that act on the flow: of layers ``potential_vorticity``, ``thickness`` and
        ``interface_height``, of levels ``potential_vorticity`` and ``buoyancy``.
    left_out_gradients : dict of str to ndarray, shape (2, layer), SI units per metre
        Uniform gradients that active fields leave out.
    assumptions : tuple of str
        What was assumed where neither files nor study say.
    """

    def __init__(self, table: EnsembleTable, folder: Path) -> None:
        self.name = table.name
        self.split: str = table.split
        self._table = table
        self._folder = folder
        self._stack = ExitStack()
        self._block: dict[tuple[Path, str], npt.NDArray[Any]] = {}
        self._block_start = -1
        self._stored = StoredVariables(self._stack)
        self._band: Band | None = None
        self._part: tuple[slice, Ensemble] | None = None
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
        check_points(table.grid, first.dataset, self.roles, self.axes, first.path)
        check_members_alike(self.members, self.roles.fields, self.axes.time)
        layout = LayoutReader(table, first.dataset, self.axes, first.path)
        self._top_last = is_top_last(layout)
        self._cells = Cells(layout.rows, layout.columns, *layout.periodic())
        self._conversions = find_conversions(self.roles, first, layout.assumptions)
        self.units_before = self._conversions.before
        self.units = self._conversions.units
        self.times = read_times(layout)
        self._total_fluxes = find_total_fluxes(
            table, self.roles, self._conversions.tracers, first, layout, self.times
        )
        self.grid: Grid = build_grid(layout, self._find_mask(first), self._top_last)
        check_grids_alike(self.members, layout.used, self.axes.time)
        self.member_labels = tuple(member.label for member in self.members)
        notes = [*layout.assumptions, *self._find_walls(first)]
        self._find_rules(notes)
        self.has_buoyancy = self.roles.buoyancy is not None or self._buoyancy_rule is not None
        self._find_active(table, first, notes)
        if self.roles.z_velocity is not None:
            notes += upward_notes(self._table.grid.faces.get("z_velocity"))
        self.assumptions = tuple(dict.fromkeys(notes))

    def _find_active(self, table: EnsembleTable, first: Member, notes: list[str]) -> None:
        names = dict(self.roles.active)
        if self.grid.vertical == "levels" and names.pop("thickness", None) is not None:
            self.roles = replace(self.roles, thickness=None)
            notes.append("the thickness of levels that stand still takes no part in eddy fluxes")
        factors = {part: self._conversions.active[part].factor for part in names}
        shape = (self.grid.shape[0], self._top_last)
        self.left_out_gradients = left_out_gradients(
            table, first.dataset, names, factors, shape, notes
        )
        self._active_names = names
        derived = ("interface_height",) if "thickness" in names and shape[0] > 1 else ()
        levels = self.has_buoyancy and self.grid.vertical == "levels"
        self.active = (*names, *derived, *(("buoyancy",) if levels else ()))
        self.units |= {"interface_height": "m", "buoyancy": "m s-2"}

    def _find_rules(self, notes: list[str]) -> None:
        """Find what depends on the rows of the grid besides the grid itself."""
        first, name = self.members[0], self.roles.temperature
        known = str(first.dataset[name].attrs.get("standard_name", "")) if name else ""
        self._buoyancy_rule = buoyancy_rule(self._table, self.roles, self.grid, known, notes)

    def __reduce__(self) -> tuple[Any, ...]:
        """Open the files again in another process."""
        return open_ensemble, (self._table, self._folder.resolve())

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
            its own name, ``buoyancy`` in m s-2 if the ensemble has it and every other
            active field; the top layer first, zero on land. Where the files hold total
            fluxes of a tracer, also ``<tracer>_within_x`` and ``_within_y``, its eddy flux
            within the window each time stands for.

        Raises
        ------
        SourceError
            If a value in the sea is missing, a layer vanishes or a file cannot be read.
        """
        mask = self.grid.geometry.mask
        every = slice(None)
        return {
            name: np.where(mask, values.astype(np.float64, copy=False), 0.0)
            for name, values in self.fields_of(time, every, every).items()
        }

    def fields_of(
        self, time: int, members: slice, rows: slice
    ) -> dict[str, npt.NDArray[np.floating]]:
        """Read one time of some members and rows.

        Parameters
        ----------
        time : int
            Number of the time.
        members, rows : slice
            Which ones.

        Returns
        -------
        dict of str to ndarray, shape (member, layer, row, x)
            As ``fields``, in the precision of the files where numbers are as they are
            there; anything on land.

        Raises
        ------
        SourceError
            If a value in the sea is missing or a file cannot be read.
        """
        source = self._rows_of(rows)
        wanted = slice(None) if source._band is None else source._band.wanted
        found: dict[str, list[npt.NDArray[np.floating]]] = {}
        for member in self.members[members]:
            for name, values in source._member_fields(member, time).items():
                found.setdefault(name, []).append(values[:, wanted])
        return {name: np.stack(values) for name, values in found.items()}

    def _rows_of(self, rows: slice) -> Ensemble:
        """Return this ensemble as if the files held no more than a band of rows."""
        count = self.grid.shape[1]
        rows = slice(*rows.indices(count)[:2])
        if rows == slice(0, count):
            return self
        if self._part is not None and self._part[0] == rows:
            return self._part[1]
        part = object.__new__(type(self))
        part.__dict__ |= self.__dict__
        band = band_of(rows, count, periodic=self._cells.periodic_y)
        part._band, part._block, part._block_start, part._part = band, {}, -1, None
        part.__dict__.pop("_block_times", None)
        numbers = band.numbers()
        part.grid = self.grid.of_rows(numbers)
        part._cells = self._cells._replace(rows=len(numbers), periodic_y=False)
        for walls in ("_open_faces", "_walls"):
            cut = {
                name: values[:, band.numbers(values.shape[1] - count)]
                for name, values in getattr(self, walls).items()
            }
            setattr(part, walls, cut)
        part._find_rules([])
        self._part = (rows, part)
        return part

    def find_problems(self, time: int) -> Iterator[SourceError]:
        """Find what keeps the fields of one time from being read, member by member.

        Parameters
        ----------
        time : int

        Yields
        ------
        SourceError
            The first problem of each member.
        """
        for member in self.members:
            try:
                self._member_fields(member, time)
            except SourceError as error:
                yield error

    def _member_fields(self, member: Member, time: int) -> dict[str, npt.NDArray[np.floating]]:
        """Read the fields of one member, with anything on land."""
        mask = self.grid.geometry.mask
        result: dict[str, npt.NDArray[np.floating]] = {
            part: self._velocity(member, part, time) for part in ("x_velocity", "y_velocity")
        }
        raw = {name: self._checked(member, name, time) for name in self.roles.scalars}
        for name in (*self.tracers, *self.withheld_tracers):
            result[name] = self._conversions.tracers[name].where_needed(raw[name])
        if self.roles.z_velocity is not None:
            result["z_velocity"] = self._upward_velocity(member, self.roles.z_velocity, time)
        for flux in self._total_fluxes:
            # The flux carries the tracer without the offset that took it to SI units.
            carried = np.float64(result[flux.tracer])
            carried = carried - self._conversions.tracers[flux.tracer].offset
            mean = np.where(mask, result[f"{flux.axis}_velocity"] * carried, 0.0)
            result[f"{flux.tracer}_within_{flux.axis}"] = self._total(member, flux, time) - mean
        if self.has_buoyancy:
            parts = {
                part: np.where(mask, self._conversions.stratifying[part](raw[name]), 0.0)
                for part, name in self.roles.stratifying.items()
            }
            if self._buoyancy_rule is None:
                result["buoyancy"] = parts["buoyancy"]
            else:
                values = self._buoyancy_rule(parts["temperature"], parts.get("salinity"))
                result["buoyancy"] = np.where(mask, values, 0.0)
        return result | self._active_fields(member, raw, time)

    def _active_fields(
        self, member: Member, raw: dict[str, npt.NDArray[np.floating]], time: int
    ) -> dict[str, FloatArray]:
        mask = self.grid.geometry.mask
        result = {
            part: np.where(mask, self._conversions.active[part](raw[name]), 0.0)
            for part, name in self._active_names.items()
        }
        if "thickness" in result:
            where = member.where(self._active_names["thickness"])
            check_thickness(result["thickness"], mask, where, time)
        if "interface_height" in self.active:
            height = interface_height(result["thickness"], self.grid.sea_floor_depth)
            result["interface_height"] = np.where(mask, height, 0.0)
        return result

    def _face(self, part: str) -> str | None:
        face = self._table.grid.faces.get(part)  # type: ignore[call-overload]
        return str(face) if face in ALONG else None

    def _velocity(self, member: Member, part: str, time: int) -> npt.NDArray[np.floating]:
        """Read a velocity at cell centres."""
        name, face = getattr(self.roles, part), self._face(part)
        convert = self._conversions.velocities[part].where_needed
        if face is None:
            return convert(self._checked(member, name, time))
        values = self._read(member, name, time)
        finite = np.isfinite(values)
        self._refuse_absent(finite, member, name, time)
        self._require(self._open_faces[part], finite, member, name, time)
        self._refuse_stray(self._walls[part] & finite, member, name, time)
        return convert(to_centres(values, face, self._cells))

    def _upward_velocity(self, member: Member, name: str, time: int) -> FloatArray:
        """Read the upward velocity at cell centres, zero on land."""
        mask, face = self.grid.geometry.mask, self._table.grid.faces.get("z_velocity")
        values = self._read(member, name, time)
        self._require(
            needed_faces(mask, face, len(values)), np.isfinite(values), member, name, time
        )
        centred = upward_at_centres(values, face, mask)
        return np.where(mask, self._conversions.velocities["z_velocity"](centred), 0.0)

    @property
    def equation(self) -> EquationOfState | None:
        """How buoyancy follows from temperature and salinity, if it does."""
        return self._buoyancy_rule

    def stratifying(self, time: int) -> dict[str, FloatArray]:
        """Read what the stratification comes from and nothing else.

        Parameters
        ----------
        time : int
            Number of the time.

        Returns
        -------
        dict of str to ndarray, shape (member, layer, y, x)
            ``temperature`` in K and ``salinity`` in g kg-1, or ``buoyancy`` in m s-2; zero
            on land.
        """
        mask = self.grid.geometry.mask
        return {
            part: np.where(mask, self._conversions.stratifying[part](self.scalar(name, time)), 0.0)
            for part, name in self.roles.stratifying.items()
        }

    def scalar(self, name: str, time: int) -> FloatArray:
        """Read one field at cell centres of all members, in the units of the files.

        Parameters
        ----------
        name : str
            Name in the files.
        time : int
            Number of the time.

        Returns
        -------
        ndarray, shape (member, layer, y, x)
            What stands on land has no meaning.

        Raises
        ------
        SourceError
            If a value in the sea is missing or a file cannot be read.
        """
        read = [self._checked(member, name, time) for member in self.members]
        return np.stack(read).astype(np.float64, copy=False)

    def _total(self, member: Member, flux: TotalFlux, time: int) -> FloatArray:
        """Read a total flux at cell centres, zero on land."""
        mask = self.grid.geometry.mask
        values = self._read(member, flux.name, time)
        face = flux.face if flux.face in ALONG else None
        needed = mask
        if face is not None:
            points = values.shape[self._cells.along(face)[0]]
            needed = between_cells(mask, face, points, self._cells)
            if face == self._face(f"{flux.axis}_velocity"):
                needed = needed & ~self._walls[f"{flux.axis}_velocity"]
        self._require(needed, np.isfinite(values), member, flux.name, time)
        return np.where(mask, flux.at(time) * to_centres(values, face, self._cells), 0.0)

    def _checked(self, member: Member, name: str, time: int) -> npt.NDArray[np.floating]:
        """Read a field at cell centres as the files have it, checked against the mask."""
        values = self._as_stored(member, name, time)
        finite, mask = np.isfinite(values), self.grid.geometry.mask
        if np.array_equal(finite, mask):
            return values
        self._refuse_absent(finite, member, name, time)
        self._require(mask, finite, member, name, time)
        if name in self.tracers:
            self._refuse_stray(finite & ~mask, member, name, time)
        return values

    def _refuse_stray(self, stray: BoolArray, member: Member, name: str, time: int) -> None:
        count = int(np.count_nonzero(stray))
        if count:
            raise SourceError(
                "values stand where the first member has land",
                where=member.where(name),
                found=f"{count} at time number {time}",
                expected=f"the land of {self.members[0].path} in every member and at every time",
                remedy="mask the same cells in all members, times and tracers",
            )

    def _refuse_absent(self, finite: BoolArray, member: Member, name: str, time: int) -> None:
        if not finite.any() and self.grid.geometry.mask.any():
            raise SourceError(
                "a member has no values at one time, so times would differ in their members",
                where=member.where(name),
                found=f"nothing at time number {time}",
                expected=f"{len(self.members)} members at every time",
                remedy="add what is missing, or remove this time or this member",
            )

    def _require(
        self, needed: BoolArray, finite: BoolArray, member: Member, name: str, time: int
    ) -> None:
        missing = int(np.count_nonzero(needed & ~finite))
        if missing:
            raise SourceError(
                "values are missing in the sea",
                where=member.where(name),
                found=f"{missing} that are not finite at time number {time}",
                expected="finite values wherever a tracer of the first member has one",
                remedy="repair the file, or mask the same cells in all members, times and fields",
            )

    def _find_mask(self, first: Member) -> BoolArray:
        """Sea is where any tracer of the first member has a value at the first time."""
        fields = [np.isfinite(self._read(first, name, 0)) for name in self.tracers]
        return np.asarray(np.any(fields, axis=0))

    def _find_walls(self, first: Member) -> list[str]:
        """Tell open faces from walls: those between sea cells that hold no velocity."""
        self._open_faces: dict[str, BoolArray] = {}
        self._walls: dict[str, BoolArray] = {}
        notes = []
        for part in ("x_velocity", "y_velocity"):
            face = self._face(part)
            if face is None:
                continue
            name = getattr(self.roles, part)
            finite = np.isfinite(self._read(first, name, 0))
            points = finite.shape[self._cells.along(face)[0]]
            inner = between_cells(self.grid.geometry.mask, face, points, self._cells)
            self._open_faces[part], self._walls[part] = inner & finite, inner & ~finite
            count = int(np.count_nonzero(self._walls[part]))
            if count:
                notes.append(
                    f"{count} faces between sea cells are walls, since '{name}' is missing there"
                )
        return notes

    def _read(self, member: Member, name: str, time: int) -> FloatArray:
        """Read one field of one member, (layer, y, x), the top layer first."""
        return self._as_stored(member, name, time).astype(np.float64, copy=False)

    def _as_stored(self, member: Member, name: str, time: int) -> npt.NDArray[Any]:
        """Read one field of one member in the precision of the files."""
        if not 0 <= time - self._block_start < self._block_times or self._block_start < 0:
            self._block.clear()
            self._block_start = time
        start = self._block_start
        key = (member.path, name)
        if key not in self._block:
            self._block[key] = self._load(member, name, start)
        block = self._block[key]
        values: npt.NDArray[Any] = block[member.index, time - start]
        return values[::-1] if self._top_last else values

    def _load(self, member: Member, name: str, start: int) -> npt.NDArray[Any]:
        """Read one variable at some times: (member, time, layer, y, x) in its own precision."""
        variable = member.dataset.variables[name]
        time, layer = self.axes.time, self.axes.layer
        place = {} if time is None else {time: slice(start, start + self._block_times)}
        lead = [dim for dim in (member.dimension, time) if dim is not None]
        along_y = [dim for dim in variable.dims if dim not in lead][-2]
        pieces: tuple[slice, ...] = (slice(None),)
        if self._band is not None:
            cells = member.dataset.variables[self.tracers[0]].sizes[self.axes.y]
            pieces = self._band.of_size(variable.sizes[along_y], cells)
        try:
            parts = [
                self._stored.read(member.path, member.dataset, name, {**place, along_y: piece})
                for piece in pieces
            ]
            axis = variable.dims.index(along_y)
            values = parts[0] if len(parts) == 1 else np.concatenate(parts, axis=axis)
            # Some files have members or times elsewhere than in front.
            values = np.moveaxis(
                values, [variable.dims.index(dim) for dim in lead], range(len(lead))
            )
        except (OSError, ValueError, RuntimeError, KeyError) as error:
            raise SourceError(
                f"cannot be read: {first_line(error)}",
                where=member.where(name),
                remedy="replace the file; it may be cut short or damaged",
            ) from None
        absent = [axis for axis, dim in enumerate((member.dimension, time, layer)) if dim is None]
        return np.expand_dims(values, absent)

    @property
    def stored_bytes(self) -> int:
        """Bytes of all fields and times that are read, in the precision of the files."""
        datasets = {id(member.dataset): member.dataset for member in self.members}
        return sum(
            int(dataset.variables[name].nbytes)
            for dataset in datasets.values()
            for name in self.roles.fields
        )

    @property
    def times_read_at_once(self) -> int:
        """Times kept in memory, in the precision of the files."""
        return self._block_times

    @cached_property
    def _block_times(self) -> int:
        """Times read at once: opening a variable costs more than reading a small field."""
        first = self.members[0]
        variable = first.dataset[self.tracers[0]]
        count = variable.sizes[self.axes.time] if self.axes.time is not None else 1
        one = variable.nbytes / max(count, 1) * len(self.roles.fields)
        one *= self._cells.rows / variable.sizes[self.axes.y]
        if first.dimension is None:
            one *= len(self.members)
        fitting = int(max(1, min(count, BLOCK_BYTES // max(one, 1))))
        # Bands are left and come back to after a few times; whole blocks fit into those.
        return fitting if self._band is None else 2 ** (min(fitting, 8).bit_length() - 1)


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
