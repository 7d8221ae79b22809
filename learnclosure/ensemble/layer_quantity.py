"""The quantity whose surfaces bound layers: density, buoyancy, temperature or the model's own."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.protocol import EnsembleSource
from learnclosure.ensemble.reader import Ensemble
from learnclosure.ensemble.roles import require_variable
from learnclosure.ensemble.seawater import (
    FREEZING_POINT_OF_WATER,
    PASCAL_PER_DECIBAR,
    EquationOfState,
)
from learnclosure.ensemble.units import Conversion, conversion, tracer_conversion
from learnclosure.errors import GridError, RoleError, StudyError, UnitError
from learnclosure.study import LayerSettings

FloatArray = npt.NDArray[np.float64]

KEY = "[diagnosis.layers]"
LEAST_KELVIN = 200.0
"""Seawater is never as cold as this in K, nor as warm in degrees Celsius."""
LARGEST_DENSITY_ANOMALY = 100.0
"""In kg m-3; no seawater is as dense as 1000 kg m-3 and this, or as light as this."""
DENSITY_OFFSET = 1000.0


@dataclass(frozen=True)
class LayerQuantity:
    """A quantity that tells layers apart.

    Attributes
    ----------
    name, units : str
    read : callable
        Takes the number of a time, returns values, shape (member, level, y, x).
    grows_downward : bool or None
        None where only the data can tell.
    notes : tuple of str
        What it is and what was assumed of it.
    """

    name: str
    units: str
    read: Callable[[int], FloatArray]
    grows_downward: bool | None
    notes: tuple[str, ...]


def reference_pressure(given: float | str) -> float:
    """Turn the study's reference pressure into Pa.

    Parameters
    ----------
    given : float or str
        A number in dbar, or a number with its unit.

    Returns
    -------
    float, Pa

    Raises
    ------
    UnitError
        If the unit is unknown or none of pressure.
    StudyError
        If it is negative.

    Examples
    --------
    >>> reference_pressure(2000.0), reference_pressure("20 MPa")
    (20000000.0, 20000000.0)
    """
    where = f"{KEY} reference_pressure"
    if isinstance(given, str):
        pressure = conversion(given, "Pa", where).factor
    else:
        pressure = given * PASCAL_PER_DECIBAR
    if not 0.0 <= pressure < np.inf:
        raise StudyError(
            "a reference pressure is a sea pressure",
            where=where,
            found=given,
            expected="a number that is not negative, in dbar",
            remedy="give 0 for the surface or 2000 for 2000 dbar",
        )
    return pressure


def layer_quantity(source: EnsembleSource, settings: LayerSettings) -> LayerQuantity:
    """Find the quantity a study bounds layers by.

    Parameters
    ----------
    source : EnsembleSource
    settings : LayerSettings

    Returns
    -------
    LayerQuantity

    Raises
    ------
    RoleError
        If the ensemble does not hold what the quantity needs.
    UnitError, StudyError
        If the reference pressure cannot be understood.
    """
    name = settings.quantity
    if name == "potential-density":
        return _potential_density(source, settings)
    if name == "temperature":
        return _temperature(source)
    if name == "buoyancy":
        return _buoyancy(source)
    known = (*source.tracers, *source.withheld_tracers)
    if name in known or not isinstance(source, Ensemble):
        return _tracer(source, name, known)
    return _variable(source, name)


def _with_temperature(source: EnsembleSource, wanted: str) -> Ensemble:
    """Return the ensemble if it reads a temperature."""
    if isinstance(source, Ensemble) and "temperature" in source.roles.stratifying:
        return source
    raise RoleError(
        f"layers of {wanted} need a temperature",
        where=f"region '{source.name}': {KEY} quantity",
        expected="'temperature' under [ensemble.variables] and [ensemble.seawater]",
        remedy="name it, or choose another quantity such as 'buoyancy'",
    )


def _potential_density(source: EnsembleSource, settings: LayerSettings) -> LayerQuantity:
    ensemble = _with_temperature(source, "potential density")
    equation = ensemble.equation
    assert equation is not None, "a temperature comes with an equation of state"
    pressure = reference_pressure(settings.reference_pressure)
    rule: EquationOfState = equation

    def read(time: int) -> FloatArray:
        parts = ensemble.stratifying(time)
        return rule.potential_density(parts["temperature"], parts.get("salinity"), pressure)

    notes = (f"layers by {rule.describe(pressure)}",)
    return LayerQuantity("potential density", "kg m-3", read, True, notes)


def _temperature(source: EnsembleSource) -> LayerQuantity:
    ensemble = _with_temperature(source, "temperature")
    notes = (f"layers by the temperature '{ensemble.roles.temperature}' as the files hold it",)
    return LayerQuantity(
        "temperature", "K", lambda time: ensemble.stratifying(time)["temperature"], False, notes
    )


def _buoyancy(source: EnsembleSource) -> LayerQuantity:
    if not source.has_buoyancy:
        raise RoleError(
            "layers of buoyancy need a buoyancy",
            where=f"region '{source.name}': {KEY} quantity",
            expected="buoyancy, or temperature with [ensemble.seawater]",
            remedy="name one under [ensemble.variables]",
        )
    read: Callable[[int], FloatArray]
    if isinstance(source, Ensemble):
        ensemble, equation = source, source.equation

        def read(time: int) -> FloatArray:
            parts = ensemble.stratifying(time)
            if equation is None:
                return parts["buoyancy"]
            return equation(parts["temperature"], parts.get("salinity"))
    else:

        def read(time: int) -> FloatArray:
            return source.fields(time)["buoyancy"]

    return LayerQuantity("buoyancy", "m s-2", read, False, ("layers by buoyancy",))


def _tracer(source: EnsembleSource, name: str, known: tuple[str, ...]) -> LayerQuantity:
    if name not in known:
        raise RoleError(
            "the quantity of layers is unknown",
            where=f"region '{source.name}': {KEY} quantity",
            found=name,
            expected=f"potential-density, buoyancy, temperature or one of {', '.join(known)}",
            remedy="correct 'quantity'",
        )
    return LayerQuantity(
        name,
        source.units.get(name, "1"),
        lambda time: source.fields(time)[name],
        None,
        (f"layers by '{name}'",),
    )


def _variable(ensemble: Ensemble, name: str) -> LayerQuantity:
    """Take any variable at cell centres that all members hold in one unit."""
    first = ensemble.members[0]
    tracer = first.dataset[ensemble.tracers[0]]
    for member in ensemble.members:
        require_variable(member.dataset, name, f"{KEY} quantity", member.path)
        own = member.dataset[name]
        if own.dims != tracer.dims:
            raise GridError(
                "the quantity of layers sits on other points than the first tracer",
                where=member.where(name),
                found=f"({', '.join(str(dim) for dim in own.dims)})",
                expected=f"({', '.join(str(dim) for dim in tracer.dims)})",
                remedy="choose a quantity at the centres of cells",
            )
        if own.attrs.get("units") != first.dataset[name].attrs.get("units"):
            raise UnitError(
                "members hold the quantity of layers in different units",
                where=member.where(name),
                found=own.attrs.get("units"),
                expected=first.dataset[name].attrs.get("units"),
                remedy="correct the units attribute",
            )
    change: Conversion = tracer_conversion(
        str(first.dataset[name].attrs.get("units", "")), first.where(name)
    )
    mask = ensemble.grid.geometry.mask
    return LayerQuantity(
        name,
        change.units,
        lambda time: np.where(mask, change(ensemble.scalar(name, time)), 0.0),
        None,
        (f"layers by the files' own '{name}'",),
    )


def edges_in_si(settings: LayerSettings, quantity: LayerQuantity) -> tuple[FloatArray, list[str]]:
    """Turn the study's edges into the quantity's own units.

    Temperatures below 200 are taken for degrees Celsius and densities below 100 for
    anomalies from 1000 kg m-3, which is noted.

    Parameters
    ----------
    settings : LayerSettings
    quantity : LayerQuantity

    Returns
    -------
    edges : ndarray, shape (layer - 1,)
    notes : list of str

    Raises
    ------
    UnitError
        If the unit is unknown or measures something else.
    """
    edges = np.array(settings.edges, dtype=np.float64)
    if settings.units is not None:
        target = quantity.units
        edges = conversion(settings.units, target, f"{KEY} units")(edges)
    elif quantity.units == "K" and edges.max() < LEAST_KELVIN:
        return edges + FREEZING_POINT_OF_WATER, ["edges of layers are in degrees Celsius"]
    if quantity.units == "kg m-3" and edges.max() < LARGEST_DENSITY_ANOMALY:
        return edges + DENSITY_OFFSET, ["edges of layers are density anomalies from 1000 kg m-3"]
    return edges, []
