"""Seawater in SI units, held to the check values the Gibbs-SeaWater toolbox ships."""

from __future__ import annotations

from pathlib import Path

import gsw
import numpy as np
import pytest

from learnclosure.ensemble.seawater import (
    LinearSeawater,
    Teos10Seawater,
    buoyancy_from_density,
    conservative_temperature,
    density_from_buoyancy,
    expansion_coefficients,
    pressure_at_depth,
    squared_buoyancy_frequency,
)

DBAR = 1e4
CASTS = Path(gsw.__file__).parent / "tests" / "gsw_cv_v3_0.npz"


@pytest.fixture(scope="module")
def check():
    """Casts, values and tolerances of the toolbox's own check file (gsw_cv_v3_0)."""
    with np.load(CASTS) as file:
        return {name: file[name] for name in file.files}


def agree(found, expected, tolerance):
    known = np.isfinite(expected)
    assert known.any()
    np.testing.assert_allclose(found[known], expected[known], rtol=0, atol=float(tolerance))


def test_stability_of_the_check_casts(check):
    found, middle = squared_buoyancy_frequency(
        check["CT_chck_cast"] + 273.15,
        check["SA_chck_cast"],
        check["p_chck_cast"] * DBAR,
        np.broadcast_to(check["lat_chck_cast"], check["p_chck_cast"].shape),
    )
    # 273.15 K taken off again costs the last digits, far below the file's own tolerance.
    agree(found, check["n2"], check["n2_ca"] + 1e-13)
    agree(middle / DBAR, check["p_mid_n2"], check["p_mid_n2_ca"])


def test_stability_of_the_documented_cast():
    # The cast and values of the toolbox's documentation of gsw_Nsquared, which older
    # versions differ from by up to 0.5 %; relative tolerance 1e-3 on the first two.
    salinity = np.array([34.7118, 34.8915, 35.0256, 34.8472, 34.7366, 34.7324])
    celsius = np.array([28.8099, 28.4392, 22.7862, 10.2262, 6.8272, 4.3236])
    pressure = np.array([10.0, 50.0, 125.0, 250.0, 600.0, 1000.0])
    found, middle = squared_buoyancy_frequency(
        celsius + 273.15, salinity, pressure * DBAR, np.full(6, 4.0)
    )
    np.testing.assert_allclose(found[:2], [0.060846990523e-3, 0.235607737825e-3], rtol=1e-3)
    np.testing.assert_allclose(middle / DBAR, [30.0, 87.5, 187.5, 425.0, 800.0])


@pytest.mark.parametrize("thousands", [0, 1, 2, 3, 4])
def test_potential_density_of_the_check_casts(check, thousands):
    water = Teos10Seawater("conservative", np.zeros(1))
    found = water.potential_density(
        check["CT_chck_cast"] + 273.15, check["SA_chck_cast"], 1e3 * thousands * DBAR
    )
    name = f"sigma{thousands}"
    agree(found - 1000.0, check[name], check[f"{name}_ca"] + 1e-12)


def test_potential_density_at_the_own_pressure_is_density_in_situ(check):
    expected = check["rho"]
    water = Teos10Seawater("conservative", np.zeros(1))
    for place in ((0, 0), (20, 1), (40, 0)):
        found = water.potential_density(
            check["CT_chck_cast"][place] + 273.15,
            check["SA_chck_cast"][place],
            float(check["p_chck_cast"][place]) * DBAR,
        )
        assert found == pytest.approx(expected[place], abs=2e-12 + float(check["rho_ca"]))


def test_all_kinds_of_temperature_of_the_check_casts_are_one_water(check):
    salinity, pressure = check["SA_chck_cast"], check["p_chck_cast"] * DBAR
    conservative = check["CT_from_t"]
    tolerance = float(check["CT_from_t_ca"]) + 1e-12
    for kind, celsius in (
        ("in-situ", check["t_chck_cast"]),
        ("potential", check["pt0_from_t"]),
        ("conservative", conservative),
    ):
        found = conservative_temperature(celsius + 273.15, salinity, kind, pressure)
        agree(found - 273.15, conservative, 10.0 * tolerance)


def test_a_wrong_kind_of_temperature_shifts_density_by_what_a_kind_is_worth(check):
    # In situ taken for conservative at 4000 dbar: warmer by some 0.3 K, so lighter.
    deep = np.argmin(np.abs(check["p_chck_cast"][:, 0] - 4000.0))
    args = (check["t_chck_cast"][deep, 0] + 273.15, check["SA_chck_cast"][deep, 0], 0.0)
    pressure = np.array(check["p_chck_cast"][deep, 0] * DBAR)
    right = Teos10Seawater("in-situ", pressure).potential_density(*args)
    wrong = Teos10Seawater("conservative", pressure).potential_density(*args)
    assert 0.01 < right - wrong < 0.2


def test_expansion_coefficients_of_the_check_casts(check):
    expansion, contraction = expansion_coefficients(
        check["CT_chck_cast"] + 273.15, check["SA_chck_cast"], check["p_chck_cast"] * DBAR
    )
    agree(expansion, check["alpha"], float(check["alpha_ca"]) + 1e-15)
    agree(contraction, check["beta"], float(check["beta_ca"]) + 1e-15)


def test_pressure_at_the_depths_of_the_check_casts(check):
    latitude = np.broadcast_to(check["lat_chck_cast"], check["p_chck_cast"].shape)
    found = pressure_at_depth(-check["z_from_p"], latitude)
    agree(found / DBAR, check["p_from_z"], float(check["p_from_z_ca"]) + 1e-9)


def test_buoyancy_and_density_are_one_to_one():
    density = np.array([1020.0, 1025.0, 1040.0])
    np.testing.assert_allclose(density_from_buoyancy(buoyancy_from_density(density)), density)
    assert buoyancy_from_density(np.array(1025.0)) == 0.0


def test_the_linear_equation_knows_no_pressure():
    water = LinearSeawater(2e-4, 8e-4)
    warm, salt = np.array([283.15, 293.15]), np.array([35.0, 36.0])
    density = water.potential_density(warm, salt, 0.0)
    np.testing.assert_array_equal(density, water.potential_density(warm, salt, 2e7))
    # 1025 (1 - 2e-4 T + 8e-4 (S - 35)) worked by hand.
    np.testing.assert_allclose(density, [1025 * (1 - 0.002), 1025 * (1 - 0.004 + 0.0008)])
    assert "knows no pressure" in water.describe(2e7)
