"""Buoyancy from temperature and salinity."""

from __future__ import annotations

import gsw
import numpy as np
import pytest

from ensemble_cases import write_classic
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.errors import RoleError, UnitError
from learnclosure.study import EnsembleTable

STRATIFYING = ("temp", "salt")


def seawater_member(temperature, salinity):
    """Add a temperature and a salinity with the given attributes to every member."""

    def change(number, dataset):
        random = np.random.default_rng([7, number])
        shape = dataset["dye_a"].shape
        warm = np.array([18.0, 4.0])[:, None, None]
        dataset = dataset.drop_vars("reduced_gravity")
        dataset["temp"] = (dataset["dye_a"].dims, warm + random.normal(size=shape), temperature)
        dataset["salt"] = (dataset["dye_a"].dims, 35.0 + random.normal(size=shape), salinity)
        return dataset

    return change


def opened(folder, seawater, variables=None, temperature=None, salinity=None):
    change = seawater_member(temperature or {"units": "degC"}, salinity or {"units": "g kg-1"})
    write_classic(folder, members=2, change=change)
    named = {"temperature": "temp", "salinity": "salt"} if variables is None else variables
    table = EnsembleTable(name="north", files="*.nc", variables=named, seawater=seawater)
    return open_ensemble(table, folder)


def values_of(ensemble):
    datasets = [member.dataset for member in ensemble.members]
    return tuple(
        np.stack([dataset[name].values[1] for dataset in datasets]) for name in STRATIFYING
    )


def test_the_linear_equation(tmp_path):
    seawater = {"equation": "linear", "thermal_expansion": 2e-4, "haline_contraction": 8e-4}
    with opened(tmp_path, seawater) as ensemble:
        temperature, salinity = values_of(ensemble)
        expected = 9.81 * (2e-4 * temperature - 8e-4 * (salinity - 35.0))
        found = ensemble.fields(1)["buoyancy"]
        assert any("linear equation of state" in text for text in ensemble.assumptions)
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-14)


@pytest.mark.parametrize("kind", ["conservative", "potential", "in-situ"])
def test_teos_10_with_every_kind_of_temperature(tmp_path, kind):
    seawater = {"equation": "teos-10", "temperature_kind": kind}
    with opened(tmp_path, seawater) as ensemble:
        temperature, salinity = values_of(ensemble)
        found = ensemble.fields(1)["buoyancy"]
    if kind == "in-situ":
        # Middles of layers of 1000 m and 3000 m; f = 1e-4 s-1 lies at 43.29 degrees.
        pressure = gsw.p_from_z(np.array([-500.0, -2500.0])[:, None, None], 43.29)
        temperature = gsw.CT_from_t(salinity, temperature, pressure)
    elif kind == "potential":
        temperature = gsw.CT_from_pt(salinity, temperature)
    # sigma0 of TEOS-10 (IOC, SCOR & IAPSO 2010) through the Gibbs-SeaWater toolbox.
    expected = -9.81 * (gsw.sigma0(salinity, temperature) - 25.0) / 1025.0
    np.testing.assert_allclose(found, expected, rtol=0, atol=1e-8)
    assert found[:, 0].mean() > found[:, 1].mean()


def test_the_standard_name_tells_the_kind_and_the_part(tmp_path):
    with opened(
        tmp_path,
        {"equation": "teos-10"},
        variables={},
        temperature={"units": "degC", "standard_name": "sea_water_potential_temperature"},
        salinity={"units": "1", "standard_name": "sea_water_practical_salinity"},
    ) as ensemble:
        temperature, practical = values_of(ensemble)
        absolute = practical * 35.16504 / 35.0
        density = gsw.sigma0(absolute, gsw.CT_from_pt(absolute, temperature))
        found = ensemble.fields(1)["buoyancy"]
        text = " ".join(ensemble.assumptions)
    np.testing.assert_allclose(found, -9.81 * (density - 25.0) / 1025.0, rtol=0, atol=1e-12)
    assert "potential temperature" in text
    assert "practical, turned into reference salinity" in text


def test_a_salinity_that_is_a_tracer_too_keeps_its_own_unit_there(tmp_path):
    names = {"tracers": ["dye_a", "salt"], "temperature": "temp", "salinity": "salt"}
    seawater = {"equation": "linear", "thermal_expansion": 2e-4, "haline_contraction": 8e-4}
    with opened(tmp_path, seawater, names, salinity={"units": "1"}) as ensemble:
        temperature, practical = values_of(ensemble)
        fields = ensemble.fields(1)
    np.testing.assert_allclose(fields["salt"], practical, rtol=1e-15)
    expected = 9.81 * (2e-4 * temperature - 8e-4 * (practical * 35.16504 / 35.0 - 35.0))
    np.testing.assert_allclose(fields["buoyancy"], expected, rtol=0, atol=1e-14)


def test_buoyancy_itself_needs_no_equation(tmp_path):
    with opened(tmp_path, None, {"buoyancy": "temp"}, temperature={"units": "cm s-2"}) as ensemble:
        temperature, _ = values_of(ensemble)
        np.testing.assert_allclose(ensemble.fields(1)["buoyancy"], temperature / 100, rtol=1e-15)
        assert ensemble.units["temp"] == "m s-2"


@pytest.mark.parametrize(
    ("seawater", "variables", "message"),
    [
        (None, None, r"needs an equation of state; add \[ensemble.seawater\]"),
        ({"equation": "linear"}, None, "set 'thermal_expansion'"),
        ({"equation": "teos-10"}, None, "kind of temperature is unknown"),
        (
            {"equation": "teos-10", "temperature_kind": "potential"},
            {"temperature": "temp"},
            "TEOS-10 needs a salinity",
        ),
        (
            {"equation": "linear", "thermal_expansion": 2e-4, "haline_contraction": 8e-4},
            {"temperature": "temp"},
            "haline contraction needs a salinity",
        ),
    ],
)
def test_what_an_equation_lacks_is_said(tmp_path, seawater, variables, message):
    with pytest.raises(RoleError, match=message):
        opened(tmp_path, seawater, variables)


def test_a_temperature_in_metres_is_refused(tmp_path):
    with pytest.raises(UnitError, match="temp: a unit measures something else"):
        opened(
            tmp_path,
            {"equation": "linear", "thermal_expansion": 2e-4},
            temperature={"units": "m"},
        )
