"""Simulated ensembles on disk: one CF-1.11 NetCDF file a member, the same bytes every time."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from types import TracebackType
from typing import Any

import h5netcdf
import numpy as np
import numpy.typing as npt

from learnclosure import __version__
from learnclosure.errors import InputError, OutputError

Float64 = npt.NDArray[np.floating[Any]]
RECORD = "simulation.json"
VELOCITIES = {
    "x_velocity": ("sea_water_x_velocity", "velocity along x at the cell centre"),
    "y_velocity": ("sea_water_y_velocity", "velocity along y at the cell centre"),
}


@dataclass(frozen=True)
class TracerLabel:
    """How one tracer is named in the files.

    Attributes
    ----------
    name, long_name : str
    role : {"inversion", "withheld"}
    units : str
    """

    name: str
    long_name: str
    role: str
    units: str = "1"


@dataclass(frozen=True)
class ActiveLabel:
    """How one field that acts on the flow is named in the files.

    Attributes
    ----------
    role : {"potential_vorticity", "thickness"}
        Its name as well.
    long_name, units : str
    left_out_gradient : ndarray, shape (layer,)
        Uniform gradient along y that periodic values leave out, units per metre.
    standard_name : str
        Empty where CF has none.
    """

    role: str
    long_name: str
    units: str
    left_out_gradient: Float64
    standard_name: str = ""

    def attributes(self) -> dict[str, Any]:
        """Return what the variable carries."""
        named = {"standard_name": self.standard_name} if self.standard_name else {}
        return {
            **named,
            "long_name": self.long_name,
            "units": self.units,
            "active_role": self.role,
            "left_out_gradient_y": self.left_out_gradient,
        }


@dataclass(frozen=True)
class Layout:
    """What all members of one ensemble share.

    Attributes
    ----------
    title, source : str
        Global attributes.
    x, y : ndarray, m
        Positions of the cell centres.
    layer_thickness : ndarray, shape (layer,), m
        Resting thickness from the top down.
    reduced_gravity : ndarray, shape (layer - 1,), m s-2
    sea_floor_depth : ndarray, shape (y, x), m
    coriolis_parameter : float, s-1
    planetary_beta : float, m-1 s-1
        Gradient of the Coriolis parameter along y.
    periodic : str
        Periodic axes, such as ``"x y"``.
    times : ndarray, days
        Since 2000-01-01.
    tracers : tuple of TracerLabel
    precision : {"f4", "f8"}
        Of velocities and tracers.
    window : float, optional, days
        Where fields are means over windows that end at the times: how long these are.
        Total tracer fluxes through the faces are then written too.
    active : tuple of ActiveLabel
        Further fields, written in single precision.
    """

    title: str
    source: str
    x: Float64
    y: Float64
    layer_thickness: Float64
    reduced_gravity: Float64
    sea_floor_depth: Float64
    coriolis_parameter: float
    planetary_beta: float
    periodic: str
    times: Float64
    tracers: tuple[TracerLabel, ...]
    precision: str = "f4"
    window: float | None = None
    active: tuple[ActiveLabel, ...] = ()


def flux_name(tracer: str, axis: str) -> str:
    """Name of the variable with a tracer's total flux along an axis."""
    return f"{tracer}_flux_{axis}"


def member_path(folder: Path, member: int) -> Path:
    """Path of one member's file.

    Parameters
    ----------
    folder : Path
    member : int

    Returns
    -------
    Path
    """
    return folder / f"member_{member:02d}.nc"


class MemberFile:
    """One member's file, open for writing snapshot by snapshot.

    Parameters
    ----------
    folder : Path
        An existing folder.
    member : int
        Number of the member, recorded as ``realization``.
    layout : Layout
    """

    def __init__(self, folder: Path, member: int, layout: Layout) -> None:
        self._file = h5netcdf.File(member_path(folder, member), "w")
        self._write_coordinates(layout)
        self._write_static(layout, member)
        dimensions = ("time", "layer", "y", "x")
        common = {"coordinates": "realization"}
        if layout.window is not None:
            common["cell_methods"] = "time: mean"
        for name, (standard_name, long_name) in VELOCITIES.items():
            self._create(
                name, dimensions, layout.precision, standard_name=standard_name,
                long_name=long_name, units="m s-1", **common,
            )  # fmt: skip
        for label in layout.tracers:
            self._create(
                label.name, dimensions, layout.precision, long_name=label.long_name,
                units=label.units, tracer_role=label.role, **common,
            )  # fmt: skip
            if layout.window is None:
                continue
            units = "m s-1" if label.units == "1" else f"{label.units} m s-1"
            for axis, face in (("x", "east"), ("y", "north")):
                self._create(
                    flux_name(label.name, axis), dimensions, layout.precision,
                    long_name=f"total flux of {label.long_name} along {axis} through the "
                    f"{face} face of the cell",
                    units=units, total_flux_of=label.name, face=face, **common,
                )  # fmt: skip
        for active in layout.active:
            self._create(active.role, dimensions, "f4", **common, **active.attributes())

    def __enter__(self) -> MemberFile:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self._file.close()

    def _create(
        self,
        name: str,
        dimensions: tuple[str, ...],
        kind: str,
        values: Any = None,
        **attributes: Any,
    ) -> None:
        variable = self._file.create_variable(name, dimensions, kind)
        for key, value in attributes.items():
            variable.attrs[key] = value
        if values is not None:
            variable[...] = values

    def _write_coordinates(self, layout: Layout) -> None:
        layers = len(layout.layer_thickness)
        self._file.dimensions = {
            "time": len(layout.times),
            "layer": layers,
            "interface": max(layers - 1, 1),
            "y": len(layout.y),
            "x": len(layout.x),
        }
        bounds = {}
        if layout.window is not None:
            bounds["bounds"] = "time_bounds"
            self._file.dimensions["bound"] = 2
            ends = np.stack([layout.times - layout.window, layout.times], axis=1)
            self._create("time_bounds", ("time", "bound"), "f8", ends)
        self._create(
            "time", ("time",), "f8", layout.times, standard_name="time", long_name="time",
            units="days since 2000-01-01 00:00:00", calendar="standard", axis="T",
            units_metadata="leap_seconds: none", **bounds,
        )  # fmt: skip
        self._create(
            "layer", ("layer",), "i4", np.arange(layers), standard_name="model_level_number",
            long_name="layer, counted from the top", units="1", positive="down", axis="Z",
        )  # fmt: skip
        for axis, values in (("y", layout.y), ("x", layout.x)):
            self._create(
                axis, (axis,), "f8", values, standard_name=f"projection_{axis}_coordinate",
                long_name=f"distance along {axis}", units="m", axis=axis.upper(),
            )  # fmt: skip

    def _write_static(self, layout: Layout, member: int) -> None:
        self._create(
            "realization", (), "i4", member, standard_name="realization",
            long_name="number of the member", units="1",
        )  # fmt: skip
        self._create(
            "layer_thickness", ("layer",), "f8", layout.layer_thickness,
            long_name="resting layer thickness", standard_name="cell_thickness", units="m",
        )  # fmt: skip
        if len(layout.reduced_gravity):
            self._create(
                "reduced_gravity", ("interface",), "f8", layout.reduced_gravity,
                long_name="reduced gravity at the interface below a layer", units="m s-2",
            )  # fmt: skip
        self._create(
            "sea_floor_depth", ("y", "x"), "f8", layout.sea_floor_depth,
            standard_name="sea_floor_depth_below_geoid", long_name="depth of the sea floor",
            units="m",
        )  # fmt: skip
        coriolis = np.full((len(layout.y), len(layout.x)), layout.coriolis_parameter)
        self._create(
            "coriolis_parameter", ("y", "x"), "f8", coriolis,
            standard_name="coriolis_parameter", long_name="Coriolis parameter", units="s-1",
        )  # fmt: skip
        attributes = self._file.attrs
        attributes["Conventions"] = "CF-1.11"
        attributes["title"] = layout.title
        attributes["source"] = layout.source
        attributes["periodic"] = layout.periodic
        attributes["vertical"] = "layers"
        attributes["planetary_beta"] = np.float64(layout.planetary_beta)

    def write(self, time: int | slice, fields: Mapping[str, npt.NDArray[Any]]) -> None:
        """Write velocities, tracers and further fields.

        Parameters
        ----------
        time : int or slice
            Which snapshots.
        fields : mapping of str to ndarray, shape ([time,] layer, y, x)
            By their names.
        """
        for name, values in fields.items():
            variable = self._file.variables[name]
            variable[time] = values.astype(variable.dtype)


def write_record(folder: Path, record: Mapping[str, object]) -> None:
    """Write what an ensemble was made from; last, as the sign that it is complete.

    Parameters
    ----------
    folder : Path
    record : mapping
        JSON-safe.
    """
    text = json.dumps({"learnclosure": __version__, **record}, indent=1, sort_keys=True)
    (folder / RECORD).write_text(text + "\n", encoding="utf-8")


def is_complete(folder: Path, record: Mapping[str, object], members: int) -> bool:
    """Whether a folder already holds the very ensemble asked for.

    Parameters
    ----------
    folder : Path
    record : mapping
        As for `write_record`.
    members : int

    Returns
    -------
    bool

    Raises
    ------
    OutputError
        If something that is no simulated ensemble stands there.
    """
    if not folder.exists():
        return False
    file = folder / RECORD
    if not file.is_file():
        if folder.is_dir() and not any(folder.iterdir()):
            return False
        raise OutputError(
            "holds something that is no simulated ensemble and would be lost",
            where=folder,
            expected=f"a new folder or one with a {RECORD}",
            remedy="choose another folder or move it away",
        )
    expected = json.dumps({"learnclosure": __version__, **record}, indent=1, sort_keys=True)
    same = file.read_text(encoding="utf-8") == expected + "\n"
    return same and all(member_path(folder, member).is_file() for member in range(members))


def expect_counts(where: str, counts: Sequence[tuple[str, int, int]]) -> None:
    """Refuse counts that are too small.

    Parameters
    ----------
    where : str
        What is to be simulated.
    counts : sequence of (name, value, lowest)

    Raises
    ------
    InputError
        Naming the first that is below its lowest value.
    """
    for name, value, lowest in counts:
        if value < lowest:
            raise InputError(
                f"{name} cannot be this few",
                where=where,
                found=value,
                expected=f"at least {lowest}",
                remedy=f"ask for more {name}",
            )
