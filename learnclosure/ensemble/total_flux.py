"""Total tracer fluxes that a model summed over its time steps, and the eddy part of them.

Where a model wrote means over windows of velocity u, tracer c and total flux F through the
faces, ``F - u c`` is the eddy flux inside each window, which snapshots miss. With the
covariance of the window means over members it makes up the whole eddy flux.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.axes import ALONG
from learnclosure.ensemble.conversions import SECONDS_PER_DAY
from learnclosure.ensemble.layout import LayoutReader
from learnclosure.ensemble.roles import Roles
from learnclosure.ensemble.sources import Member
from learnclosure.ensemble.units import Conversion, conversion, is_convertible
from learnclosure.errors import GridError, SourceError, UnitError
from learnclosure.study import EnsembleTable

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class TotalFlux:
    """One component of the total flux of one tracer.

    Attributes
    ----------
    tracer : str
    axis : {"x", "y"}
    name : str
        Variable in the files.
    face : str
        Face of the cell it passes, or ``"center"``.
    factor : float or ndarray, shape (time,)
        What turns the values of each time into tracer units times m s-1.
    """

    tracer: str
    axis: str
    name: str
    face: str
    factor: FloatArray

    def at(self, time: int) -> float:
        """Return the factor of one time."""
        return float(self.factor[time])


def find_total_fluxes(
    table: EnsembleTable,
    roles: Roles,
    tracers: dict[str, Conversion],
    first: Member,
    reader: LayoutReader,
    times: FloatArray,
) -> tuple[TotalFlux, ...]:
    """Find the total fluxes of one member, and say that they are used.

    Parameters
    ----------
    table : EnsembleTable
    roles : Roles
    tracers : dict of str to Conversion
        How tracers come to SI units.
    first : Member
    reader : LayoutReader
        Its assumptions are added to.
    times : ndarray, shape (time,), days

    Returns
    -------
    tuple of TotalFlux
        Two for each tracer that has them.

    Raises
    ------
    GridError
        If a flux does not fit its tracer's cells.
    UnitError
        If a unit is neither that of a flux nor of a flux summed over time.
    SourceError
        If sums over time are given but not over how long.
    """
    found = []
    for tracer, pair in roles.total_fluxes.items():
        for axis, name in zip("xy", pair, strict=True):
            attributes = first.dataset[name].attrs
            said = table.grid.faces.get(f"total_flux_{axis}")  # type: ignore[call-overload]
            velocity = table.grid.faces.get(f"{axis}_velocity", "center")  # type: ignore[call-overload]
            face = str(said or attributes.get("face") or velocity)
            _check_fit(first, name, tracer, face, axis)
            units = str(attributes.get("units", ""))
            tracer_units = first.dataset[tracer].attrs.get("units", "1")
            factor = _factor(units, str(tracer_units), first.where(name), reader, times)
            found.append(TotalFlux(tracer, axis, name, face, tracers[tracer].factor * factor))
    if found:
        names = ", ".join(roles.total_fluxes)
        reader.assumptions.append(
            f"eddy fluxes of {names} include those within the windows of the files, from the "
            "total fluxes there"
        )
    return tuple(found)


def _check_fit(first: Member, name: str, tracer: str, face: str, axis: str) -> None:
    own, cells = first.dataset[name].sizes, first.dataset[tracer].sizes
    larger = sum(size - cell for size, cell in zip(own.values(), cells.values(), strict=False))
    along = ALONG.get(face)
    # Faces may be one more than cells along their axis, and have a dimension of their own.
    grown = larger == 1 and along is not None
    if len(own) != len(cells) or not (larger == 0 or grown) or along not in (None, axis):
        raise GridError(
            "the total flux does not fit the cells of its tracer",
            where=first.where(name),
            found=f"{dict(own)} on the {face} face",
            expected=f"{dict(cells)}, or one more along {axis} on faces",
            remedy=f"check which variable is named, and faces total_flux_{axis} under "
            "[ensemble.grid]",
        )


def _factor(
    units: str, tracer_units: str, where: str, reader: LayoutReader, times: FloatArray
) -> FloatArray:
    plain = "" if tracer_units.strip() in ("", "1") else f"{tracer_units.strip()} "
    if is_convertible(units, f"{plain}m s-1", where):
        return np.full(len(times), conversion(units, f"{plain}m s-1", where).factor)
    if is_convertible(units, f"{plain}m", where):
        return conversion(units, f"{plain}m", where).factor / _window_seconds(reader, times, where)
    raise UnitError(
        "a unit measures something else",
        where=where,
        found=repr(units),
        expected=f"'{plain}m s-1', or '{plain}m' if summed over time",
        remedy="check which variable is named as a total flux, and its units",
    )


def _window_seconds(reader: LayoutReader, times: FloatArray, where: str) -> FloatArray:
    """Length of the window each time stands for, s."""
    name = reader.axes.time
    bounds = str(reader.dataset[name].attrs.get("bounds", "")) if name is not None else ""
    if bounds in reader.dataset.variables:
        ends = np.asarray(reader.dataset[bounds].values, dtype=np.float64)
        unit = reader.units_of(str(name), "days").split(" since ")[0]
        return np.asarray(conversion(unit, "s", where)(ends[:, 1] - ends[:, 0]))
    spacing = np.diff(times)
    if len(spacing) and np.allclose(spacing, spacing[0], rtol=1e-3):
        reader.assumptions.append("each window lasts from one time to the next")
        return np.full(len(times), spacing[0] * SECONDS_PER_DAY)
    raise SourceError(
        "sums over time are given, but not over how long",
        where=where,
        found="times without bounds that are not evenly spaced",
        expected="a 'bounds' variable of the time coordinate",
        remedy="add the bounds, or divide the sums by their time",
    )
