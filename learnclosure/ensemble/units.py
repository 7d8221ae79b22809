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


SCALE = re.compile(r"\s*([0-9.]+(?:[eE][+-]?[0-9]+)?)(?![\w/])\s*")
"""A number in front of a unit, as in ``1e-3`` or ``1e6 m3 s-1``."""

REFERENCE_SALINITY_PER_PRACTICAL = 35.16504 / 35.0


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

    def __call__(self, values: npt.NDArray[np.floating]) -> FloatArray:
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

    def where_needed(self, values: npt.NDArray[np.floating]) -> npt.NDArray[np.floating]:
        """Convert values, leaving those that need it not in their own precision.

        Parameters
        ----------
        values : ndarray

        Returns
        -------
        ndarray
        """
        return values if self.factor == 1.0 and not self.offset else self(values)


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


def _attempts(spelling: str) -> tuple[str, ...]:
    """Spellings to try: names of units, but not their symbols, may be in capitals."""
    words = re.findall(r"[A-Za-z]+", spelling)
    if all(len(word) > 2 for word in words):
        return spelling, spelling.lower()
    return (spelling,)


def _parse(text: str, where: str) -> tuple[float, pint.Unit]:
    """Read a unit as a number times a unit pint knows; see :func:`parse_unit`."""
    words = re.findall(r"[A-Za-z]+", text)
    trap = next((TRAPS[word.lower()] for word in words if word.lower() in TRAPS), None)
    scaled = SCALE.match(text)
    scale, rest = (float(scaled[1]), text[scaled.end() :]) if scaled else (1.0, text)
    for attempt in () if trap else _attempts(_pint_spelling(rest)):
        try:
            return scale, _registry().parse_units(attempt)
        except (pint.PintError, ValueError, TypeError, AttributeError, SyntaxError):
            continue
    raise UnitError(
        "unknown unit",
        where=where,
        found=repr(text),
        expected="a unit UDUNITS knows, such as 'm s-1', 'degC' or '1'",
        remedy=trap or "correct the units attribute of the variable",
    )


def measures_angle(text: str) -> bool:
    """Tell whether a unit is spelled as an angle; a pure number is none.

    Parameters
    ----------
    text : str

    Returns
    -------
    bool
    """
    return (
        re.match(r"deg(rees?)?(_?(north|east|n|e))?$|rad(ian)?s?$", text.strip().lower())
        is not None
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
    scale, unit = _parse(text, where)
    wanted = _parse(target, where)[1]
    try:
        zero = _registry().Quantity(0.0, unit).to(wanted).magnitude
        one = _registry().Quantity(scale, unit).to(wanted).magnitude
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


def is_convertible(text: str, target: str, where: str) -> bool:
    """Tell whether a unit measures the same thing as another.

    Parameters
    ----------
    text, target : str
    where : str
        File and variable, for the message.

    Returns
    -------
    bool

    Raises
    ------
    UnitError
        If a unit is unknown.
    """
    return bool(_parse(text, where)[1].is_compatible_with(_parse(target, where)[1]))


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
    _, unit = _parse(text, where)
    if unit.is_compatible_with("kelvin"):
        return conversion(text, "K", where)
    plain = text.strip()
    if SPELLINGS.get(plain) == "dimensionless":
        return Conversion(1.0, 0.0, "1")
    return Conversion(1.0, 0.0, re.sub(r"/([A-Za-z]+)(\d*)", _as_factor, plain))


def salinity_conversion(text: str, standard_name: str, where: str) -> tuple[Conversion, bool]:
    """Find how a salinity is brought to absolute salinity in g kg-1.

    Practical salinity is a pure number near 35; it is told by its standard name or by
    the unit ``1`` and turned into reference salinity (Millero et al. 2008, Deep-Sea
    Research I 55).

    Parameters
    ----------
    text, standard_name : str
        Attributes of the variable.
    where : str

    Returns
    -------
    Conversion, bool
        The conversion and whether the salinity is a practical one.

    Raises
    ------
    UnitError
        If the unit is unknown or no share of mass.
    """
    practical = SPELLINGS.get(text.strip()) == "dimensionless"
    if practical or standard_name == "sea_water_practical_salinity":
        _parse(text, where)
        return Conversion(REFERENCE_SALINITY_PER_PRACTICAL, 0.0, "g kg-1"), True
    return conversion(text, "g kg-1", where), False


def _as_factor(quotient: re.Match[str]) -> str:
    return f" {quotient[1]}-{quotient[2] or 1}"
