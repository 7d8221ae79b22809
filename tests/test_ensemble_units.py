"""What unit attributes of files mean."""

from __future__ import annotations

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from learnclosure.ensemble.units import (
    conversion,
    measures_angle,
    salinity_conversion,
    tracer_conversion,
)
from learnclosure.errors import UnitError


@pytest.mark.parametrize("text", ["m2 s-1", "m^2 s^-1", "m**2/s", "m2/s", "m2 sec-1", "m^2/sec"])
def test_udunits_spellings_of_one_unit_are_one(text):
    # UDUNITS-2 takes these six for the same unit (tried with cf-units 3.3.1).
    assert conversion(text, "m2 s-1", "f: v")[:2] == (1.0, 0.0)


@pytest.mark.parametrize(
    ("text", "target", "factor", "offset"),
    [
        ("km", "m", 1e3, 0.0),
        ("METERS", "m", 1.0, 0.0),
        ("cm/s", "m s-1", 1e-2, 0.0),
        ("deg C", "K", 1.0, 273.15),
        ("degree_C", "K", 1.0, 273.15),
        ("K", "K", 1.0, 0.0),
        ("days", "s", 86400.0, 0.0),
        ("1e-3", "g kg-1", 1.0, 0.0),
        ("1e6 m3 s-1", "m3 s-1", 1e6, 0.0),
        ("degrees_north", "radian", 0.017453292519943295, 0.0),
    ],
)
def test_units_convert(text, target, factor, offset):
    found = conversion(text, target, "f: v")
    assert found.factor == pytest.approx(factor, rel=1e-12)
    assert found.offset == offset


def test_tracers_keep_their_unit_unless_it_is_a_temperature():
    assert tracer_conversion("degC", "f: v") == (1.0, 273.15, "K")
    assert tracer_conversion("g/kg", "f: v") == (1.0, 0.0, "g kg-1")
    assert tracer_conversion("mmol m-3", "f: v") == (1.0, 0.0, "mmol m-3")
    assert tracer_conversion("", "f: v") == (1.0, 0.0, "1")


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("PSU", "practical salinity has the unit '1'"),
        ("ppt", "parts per trillion"),
        ("Sv", "sievert"),
        ("Sv m-1", "sievert"),
        ("1e6 ppt m s-1", "parts per trillion"),
        ("level", "correct the units attribute"),
        ("unitless", "correct the units attribute"),
    ],
)
def test_traps_and_unknown_units_are_named_with_their_place(text, words):
    with pytest.raises(UnitError, match=rf"^m0\.nc: salt: unknown unit \(found '{text}'") as caught:
        conversion(text, "g kg-1", "m0.nc: salt")
    assert words in str(caught.value)


def test_a_unit_of_something_else_is_refused():
    with pytest.raises(UnitError, match=r"m0\.nc: u: a unit measures something else"):
        conversion("kg", "m s-1", "m0.nc: u")
    with pytest.raises(UnitError, match="measures something else"):
        conversion("M/S", "m s-1", "m0.nc: u")


def test_practical_salinity_becomes_reference_salinity():
    # Millero et al. 2008, Deep-Sea Research I 55: S_R = (35.16504 g kg-1 / 35) S_P.
    for units, name in (("1", ""), ("1e-3", "sea_water_practical_salinity")):
        change, practical = salinity_conversion(units, name, "f: v")
        assert practical
        assert change(35.0) == pytest.approx(35.16504, rel=1e-15)
    assert salinity_conversion("1e-3", "sea_water_salinity", "f: v")[1] is False


def test_angles_are_told_by_their_spelling():
    assert all(map(measures_angle, ("degrees_east", "degree_N", "degrees", "deg", "radian", "rad")))
    assert not any(map(measures_angle, ("", "1", "km", "m", "degC", "degree_C")))


@given(st.floats(-1e6, 1e6), st.sampled_from(["degC", "degF", "K"]))
@settings(max_examples=30, derandomize=True, deadline=None)
def test_temperature_differences_survive_conversion(value, units):
    change = conversion(units, "K", "f: v")
    step = 5.0 / 9.0 if units == "degF" else 1.0
    difference = float(change(value + 1.0)) - float(change(value))
    assert difference == pytest.approx(step, abs=1e-8)
