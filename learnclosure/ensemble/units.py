"""Units at the boundary: what files say, turned into SI with pint."""

from __future__ import annotations

import re
from functools import cache
from typing import NamedTuple

import numpy as np
import numpy.typing as npt
import pint

from learnclosure.errors import UnitError

FloatArray = npt.NDArray[np.float64]

SPELLINGS = {
    "": "dimensionless",
    "1": "dimensionless",
    "deg c": "degC",
    "degc": "degC",
    "deg_c": "degC",
    "degree_c": "degC",
    "degrees_c": "degC",
    "degree_celsius": "degC",
    "degrees_celsius": "degC",
    "celsius": "degC",
    "degrees_north": "degree",
    "degree_north": "degree",
    "degrees_n": "degree",
    "degrees_east": "degree",
    "degree_east": "degree",
    "degrees_e": "degree",
    "degrees": "degree",
}

TRAPS = {
    "ppt": "in UDUNITS it means parts per trillion; write 'g kg-1' or '1e-3'",
    "psu": "practical salinity has the unit '1'",
    "pss": "practical salinity has the unit '1'",
    "sv": "in UDUNITS it means sievert; write '1e6 m3 s-1'",
}


class Conversion(NamedTuple):
    """Multiply by ``factor``, then add ``offset``, to come to ``units``.

    Attributes
    ----------
    factor, offset : float
    units : str
        Units after conversion, in UDUNITS spelling.
    """

    factor: float
    offset: float
    units: str

    def __call__(self, values: FloatArray) -> FloatArray:
        """Convert values.

        Parameters
        ----------
        values : ndarray

        Returns
        -------
        ndarray of float64
        """
        converted = np.asarray(values, dtype=np.float64)
        if self.factor != 1.0:
            converted = converted * self.factor
        return converted + self.offset if self.offset else converted


@cache
def _registry() -> pint.UnitRegistry[float]:
    return pint.UnitRegistry(autoconvert_offset_to_baseunit=True)


def _pint_spelling(text: str) -> str:
    """Turn UDUNITS spellings such as ``m2 s-1`` into what pint reads."""
    plain = text.strip()
    if plain.lower() in SPELLINGS:
        return SPELLINGS[plain.lower()]
    powers = re.sub(r"(?<=[A-Za-z])\^?\*{0,2}(-?\d+)", r"**(\1)", plain)
    return re.sub(r"(?<=[\w)])[ .](?=[A-Za-z])", "*", powers)


def parse_unit(text: str, where: str) -> pint.Unit:
    """Read a unit.

    Parameters
    ----------
    text : str
        As a file gives it.
    where : str
        File and variable, for the message.

    Returns
    -------
    pint.Unit

    Raises
    ------
    UnitError
        If the unit is unknown or a known trap.
    """
    trap = TRAPS.get(text.strip().lower())
    spelling = _pint_spelling(text)
    # Names of units, but not their symbols, may be written in capitals.
    for attempt in () if trap else (spelling, spelling.lower()):
        try:
            return _registry().parse_units(attempt)
        except (pint.PintError, ValueError, TypeError, AttributeError, SyntaxError):
            trap = "correct the units attribute of the variable"
    raise UnitError(
        "unknown unit",
        where=where,
        found=repr(text),
        expected="a unit UDUNITS knows, such as 'm s-1', 'degC' or '1'",
        remedy=trap,
    )


def conversion(text: str, target: str, where: str) -> Conversion:
    """Find how values in one unit become values in another.

    Parameters
    ----------
    text : str
        Unit the values have.
    target : str
        Unit wanted.
    where : str
        File and variable, for the message.

    Returns
    -------
    Conversion

    Raises
    ------
    UnitError
        If a unit is unknown or the two measure different things.

    Examples
    --------
    >>> conversion("km", "m", "file: x").factor
    1000.0
    >>> conversion("deg C", "K", "file: temp").offset
    273.15
    """
    unit, wanted = parse_unit(text, where), parse_unit(target, where)
    try:
        zero = _registry().Quantity(0.0, unit).to(wanted).magnitude
        one = _registry().Quantity(1.0, unit).to(wanted).magnitude
    except pint.DimensionalityError:
        raise UnitError(
            "a unit measures something else",
            where=where,
            found=repr(text),
            expected=f"one that converts to '{target}'",
            remedy="check which variable plays this part and its units attribute",
        ) from None
    # Only differences across an offset carry rounding that is not the unit's own.
    return Conversion(round(one - zero, 12) if zero else float(one), float(zero), target)


def tracer_conversion(text: str, where: str) -> Conversion:
    """Find how a tracer's values are brought to SI: temperatures in K, the rest as it is.

    Parameters
    ----------
    text : str
    where : str

    Returns
    -------
    Conversion

    Raises
    ------
    UnitError
        If the unit is unknown.
    """
    unit = parse_unit(text, where)
    if unit.is_compatible_with("kelvin"):
        return conversion(text, "K", where)
    plain = text.strip()
    if SPELLINGS.get(plain) == "dimensionless":
        return Conversion(1.0, 0.0, "1")
    return Conversion(1.0, 0.0, re.sub(r"/([A-Za-z]+)(\d*)", _as_factor, plain))


def _as_factor(quotient: re.Match[str]) -> str:
    return f" {quotient[1]}-{quotient[2] or 1}"
