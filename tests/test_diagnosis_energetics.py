"""Signs, sizes and the bound of eddy energies and conversions."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from active_cases import accumulated, noisy_active, sloping_layers, sloping_levels
from diagnosis_cases import box
from learnclosure.diagnosis.energetics import (
    barotropic_conversion,
    check_energy_bound,
    energetics,
    interface_stratification,
    level_stratification,
)
from learnclosure.diagnosis.moments import GroupMoments
from learnclosure.diagnosis.surfaces import Surfaces, find_surfaces

N2 = 4e-6


def test_the_worked_number_of_the_energy_bound():
    # Marshall, Maddison and Berloff 2012, J. Phys. Oceanogr. 42, 539-557: with N = 2e-3 s-1,
    # a horizontal buoyancy gradient of 5e-9 s-2 and an eddy energy of .01 m2 s-2 the GM
    # coefficient is at most N E / M^2 = 4000 m2 s-1; one of 400 is a tenth of it.
    grid = box(1, 4, 5)
    ones = np.ones(grid.shape)
    gm, kinetic = 400.0, 0.006
    variance = 2 * N2 * 0.004 * ones
    pairs = {("buoyancy", "buoyancy"): variance}
    for pair in ("xx", "xy", "yy"):
        pairs[f"{pair[0]}_velocity", f"{pair[1]}_velocity"] = 0.0 * ones
    moments = GroupMoments(
        mean={
            "buoyancy": 5e-9 * grid.y[:, None] * ones,
            "x_velocity": 0 * ones,
            "y_velocity": 0 * ones,
        },
        flux={"buoyancy": np.stack([0.0 * ones, -gm * 5e-9 * ones])},
        eddy_kinetic_energy=kinetic * ones,
        covariance=pairs,
    )
    surfaces = Surfaces("layer", grid.geometry, grid.geometry.area * ones, np.zeros((2, 1)))
    found = energetics(moments, grid.geometry, surfaces, N2 * ones)
    np.testing.assert_allclose(found.potential_energy, 0.004)
    np.testing.assert_allclose(found.efficiency, 0.1)
    np.testing.assert_allclose(found.baroclinic_conversion, gm * 5e-9**2 / N2)


@settings(derandomize=True, max_examples=15, deadline=None)
@given(
    seed=st.integers(0, 10**6), members=st.integers(2, 7), times=st.integers(1, 3),
    factor=st.integers(1, 3), mixing=st.floats(0.0, 1.0),
)  # fmt: skip
def test_no_sample_passes_the_bound(seed, members, times, factor, mixing):
    ensemble = noisy_active(members=members, times=times, seed=seed)
    v = ensemble.values["y_velocity"]
    ensemble.values["thickness"] = mixing * ensemble.values["thickness"] - (1 - mixing) * v
    moments, _ = accumulated(ensemble, factor)
    for group in (moments.whole, *moments.halves):
        check = check_energy_bound(group, ensemble.active)
        assert check.violations == 0
        assert set(check.largest_ratio) == {"momentum", *ensemble.active}
        assert all(0.0 < ratio <= 1.0 + 1e-12 for ratio in check.largest_ratio.values())


def test_moments_with_unlike_weights_are_found_out():
    ensemble, _ = sloping_layers(np.array([0.0, -1e-3, 0.0]), np.array([800.0, 900.0]))
    ensemble.values["thickness"] = 800.0 - 1e3 * ensemble.values["y_velocity"]
    ensemble.values["x_velocity"] = 0.0 * ensemble.values["y_velocity"]
    whole = accumulated(ensemble)[0].whole
    assert check_energy_bound(whole, ("thickness",)).violations == 0
    members = len(ensemble.member_labels)
    wrong = replace(whole, flux={"thickness": members / (members - 1) * whole.flux["thickness"]})
    check = check_energy_bound(wrong, ("thickness",))
    assert check.violations == whole.flux["thickness"][0].size
    assert check.largest_ratio["thickness"] == pytest.approx(members / (members - 1))


@pytest.mark.parametrize("slope", [5e-9, -5e-9])
def test_eddies_that_flatten_buoyancy_gain_energy_on_levels(slope):
    ensemble, diffusivity = sloping_levels(N2, slope)
    moments, estimator = accumulated(ensemble)
    surfaces = find_surfaces(ensemble, estimator.geometry, estimator.area)
    thickness = ensemble.grid.layer_thickness
    stratification = level_stratification(
        moments.whole.mean["buoyancy"], thickness, estimator.geometry
    )
    np.testing.assert_allclose(stratification, N2, rtol=1e-9)
    found = energetics(moments.whole, estimator.geometry, surfaces, stratification)
    # The vertical eddy buoyancy flux of GM, k S^2 N^2 with S = M^2/N^2 (Griffies 1998,
    # J. Phys. Oceanogr. 28, 831-841), is what the eddies gain.
    np.testing.assert_allclose(found.baroclinic_conversion, diffusivity * slope**2 / N2, rtol=1e-9)
    assert diffusivity > 0.0
    assert (found.efficiency > 0.0).all()


def test_layers_and_levels_tell_the_same_energies():
    slope = 1e-3
    ensemble, diffusivity = sloping_layers(np.array([0.0, slope, 0.0]), np.array([1000.0, 1000.0]))
    moments, estimator = accumulated(ensemble)
    surfaces = find_surfaces(ensemble, estimator.geometry, estimator.area)
    gravity = np.full((1, 6, 8), 0.02)
    stratification = interface_stratification(gravity, np.full((2, 6, 8), 1000.0))
    np.testing.assert_allclose(stratification, 0.02 / 1000.0)
    found = energetics(moments.whole, estimator.geometry, surfaces, stratification)
    np.testing.assert_allclose(
        found.baroclinic_conversion, 2e-5 * diffusivity * slope**2, rtol=1e-9
    )
    # g' <eta'^2> / 2 per unit area, over the distance of the layers' centres.
    variance = moments.whole.covariance["interface_height", "interface_height"][:1]
    np.testing.assert_allclose(1000.0 * found.potential_energy, 0.5 * 0.02 * variance)


def test_eddies_gain_from_a_shear_they_weaken():
    # -<u'v'> dU/dy (Harrison and Robinson 1978, Dyn. Atmos. Oceans 2, 185-210; from memory).
    grid = box(1, 5, 6)
    ones = np.ones(grid.shape)
    stress = {
        ("x_velocity", "x_velocity"): 2e-3 * ones,
        ("x_velocity", "y_velocity"): -1e-3 * ones,
        ("y_velocity", "y_velocity"): 2e-3 * ones,
    }
    shear = 1e-6 * grid.y[:, None] * ones
    moments = GroupMoments({"x_velocity": shear, "y_velocity": 0 * ones}, {}, ones, stress)
    np.testing.assert_allclose(barotropic_conversion(moments, grid.geometry), 1e-9)
    stretched = GroupMoments(
        {"x_velocity": 1e-6 * grid.x * ones, "y_velocity": -2e-6 * grid.y[:, None] * ones},
        {}, ones, stress,
    )  # fmt: skip
    np.testing.assert_allclose(barotropic_conversion(stretched, grid.geometry), 2e-9)


def test_where_the_column_is_not_stratified_no_potential_energy_is_given():
    grid = box(3, 3, 4)
    buoyancy = np.array([0.02, 0.0, 0.03])[:, None, None] * np.ones(grid.shape)
    found = level_stratification(buoyancy, grid.layer_thickness, grid.geometry)
    assert (found[0] == 2e-5).all()
    assert np.isnan(found[1:]).all()
    assert np.isnan(interface_stratification(np.zeros((2, 3, 4)), grid.layer_thickness)).all()
