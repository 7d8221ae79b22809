"""Tensors along isoneutral surfaces and in depth axes, both ways."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from layers_cases import level_grid
from learnclosure.diagnosis.isoneutral import (
    bolus_velocity,
    danabasoglu_taper,
    depth_tensor,
    gerdes_taper,
    isoneutral_parts,
    neutral_slopes,
    skew_tensor,
    slopes_from_buoyancy,
    slopes_of_layers,
)
from learnclosure.diagnosis.tensor_3d import split_tensor
from learnclosure.ensemble.seawater import Teos10Seawater

quick = settings(max_examples=40, deadline=None, derandomize=True)
numbers = st.floats(-2000.0, 2000.0)
steepness = st.floats(-0.05, 0.05)
forms = st.sampled_from(["small-slope", "full"])


def isotropic(k):
    return k * np.eye(2)


def test_the_matrices_of_redi_and_of_gent_and_mcwilliams():
    # Griffies 1998, J. Phys. Oceanogr. 28, 831-841: small-slope Redi, skew flux and their sum
    # for equal coefficients, as ocean-model manuals print them.
    slope_x, slope_y, k = 2e-3, -1e-3, 800.0
    slopes, square = np.array([slope_x, slope_y]), slope_x**2 + slope_y**2
    redi = k * np.array([[1, 0, slope_x], [0, 1, slope_y], [slope_x, slope_y, square]])
    skew = k * np.array([[0, 0, -slope_x], [0, 0, -slope_y], [slope_x, slope_y, 0]])
    both = k * np.array([[1, 0, 0], [0, 1, 0], [2 * slope_x, 2 * slope_y, square]])
    np.testing.assert_allclose(depth_tensor(isotropic(k), 0.0, slopes), redi, rtol=1e-15)
    np.testing.assert_allclose(skew_tensor(k, slopes), skew, rtol=1e-15)
    np.testing.assert_allclose(depth_tensor(isotropic(k), k, slopes), both, rtol=1e-15)


def test_the_full_matrix_of_redi():
    # Redi 1982, J. Phys. Oceanogr. 12, 1154-1158.
    a, b, k = 0.08, -0.03, 800.0
    square = a**2 + b**2
    expected = k / (1 + square) * np.array(
        [[1 + b**2, -a * b, a], [-a * b, 1 + a**2, b], [a, b, square]]
    )  # fmt: skip
    found = depth_tensor(isotropic(k), 0.0, np.array([a, b]), form="full")
    np.testing.assert_allclose(found, expected, rtol=1e-12)


@pytest.mark.parametrize(("slope", "largest"), [(0.01, 1e-4), (0.1, 9.9e-3)])
def test_how_far_the_small_slope_form_is_from_the_full_one(slope, largest):
    # The largest difference of entries is S^2/(1+S^2): 1e-4 at .01, 9.9e-3 at .1.
    slopes = np.array([slope, 0.0])
    small = depth_tensor(isotropic(1.0), 0.0, slopes)
    full = depth_tensor(isotropic(1.0), 0.0, slopes, form="full")
    assert np.abs(small - full).max() == pytest.approx(slope**2 / (1 + slope**2))
    assert np.abs(small - full).max() == pytest.approx(largest, rel=0.01)


@quick
@given(xx=numbers, xy=numbers, yx=numbers, yy=numbers, a=steepness, b=steepness, form=forms)
def test_no_tensor_along_surfaces_moves_density_through_them(xx, xy, yx, yy, a, b, form):
    # (-Sx, -Sy, 1) is the neutral direction: no flux down it and none through the surface.
    tensor = depth_tensor(np.array([[xx, xy], [yx, yy]]), 0.0, np.array([a, b]), form=form)
    neutral = np.array([-a, -b, 1.0])
    np.testing.assert_allclose(tensor @ neutral, 0.0, atol=1e-11)
    np.testing.assert_allclose(neutral @ tensor, 0.0, atol=1e-11)


def test_eigenvalues_of_both_forms():
    a, b = 0.06, 0.08
    values = np.linalg.eigvalsh(depth_tensor(isotropic(1.0), 0.0, np.array([a, b])))
    np.testing.assert_allclose(values, [0.0, 1.0, 1.0 + a**2 + b**2], atol=1e-14)
    full = depth_tensor(isotropic(1.0), 0.0, np.array([a, b]), form="full")
    np.testing.assert_allclose(np.linalg.eigvalsh(full), [0.0, 1.0, 1.0], atol=1e-14)


@quick
@given(k=numbers, a=steepness, b=steepness, g=st.tuples(numbers, numbers, numbers))
def test_the_skew_flux_mixes_nothing(k, a, b, g):
    tensor = skew_tensor(k, np.array([a, b]))
    symmetric, vector = split_tensor(tensor)
    np.testing.assert_array_equal(symmetric, 0.0)
    np.testing.assert_allclose(vector, [k * b, -k * a, 0.0])
    gradient = np.array(g)
    assert abs(gradient @ tensor @ gradient) <= 1e-9 * (1.0 + np.abs(tensor).max() * 4e6 * 3)


@quick
@given(k=st.floats(1.0, 5000.0), a=steepness, b=steepness, n2=st.floats(1e-7, 1e-3))
def test_the_skew_flux_of_buoyancy_releases_potential_energy(k, a, b, n2):
    # Horizontal flux -k grad_h b, vertical +k S^2 N^2, never negative.
    gradient = np.array([-a * n2, -b * n2, n2])
    flux = -skew_tensor(k, np.array([a, b])) @ gradient
    np.testing.assert_allclose(flux[:2], -k * gradient[:2], rtol=1e-12, atol=1e-300)
    assert flux[2] == pytest.approx(k * (a**2 + b**2) * n2, rel=1e-12, abs=1e-300)
    assert flux[2] >= 0.0


@quick
@given(
    xx=numbers, xy=numbers, yx=numbers, yy=numbers, k=numbers, a=steepness, b=steepness, form=forms
)  # fmt: skip
def test_there_and_back_again(xx, xy, yx, yy, k, a, b, form):
    tensor, slopes = np.array([[xx, xy], [yx, yy]]), np.array([a, b])
    parts = isoneutral_parts(depth_tensor(tensor, k, slopes, form=form), slopes, form=form)
    np.testing.assert_allclose(parts.tensor, tensor, atol=1e-9)
    np.testing.assert_allclose(parts.departure, 0.0, atol=1e-9)
    if np.hypot(a, b) > 1e-4:
        assert parts.skew_diffusivity == pytest.approx(k, abs=1e-6)


@quick
@given(seed=st.integers(0, 1000), form=forms)
def test_parts_and_departure_add_up_to_any_tensor(seed, form):
    random = np.random.default_rng(seed)
    tensor, slopes = random.normal(size=(2, 3, 3, 3)), 0.02 * random.normal(size=(2, 2, 3))
    parts = isoneutral_parts(tensor, slopes, form=form)
    rebuilt = depth_tensor(parts.tensor, parts.skew_diffusivity, slopes, form=form)
    np.testing.assert_allclose(rebuilt + parts.departure, tensor, atol=1e-12)


def test_where_surfaces_are_level_or_unknown_nothing_is_made_up():
    tensor = depth_tensor(isotropic(500.0), 0.0, np.zeros(2))
    parts = isoneutral_parts(tensor, np.zeros(2))
    np.testing.assert_array_equal(parts.tensor, isotropic(500.0))
    assert np.isnan(parts.skew_diffusivity)
    assert np.isnan(isoneutral_parts(tensor, np.array([np.nan, 0.0])).tensor).all()


def test_tapers_at_the_published_points():
    # Danabasoglu and McWilliams 1995, J. Climate 8: Sc = .004, Sd = .001 (ocean-model manual).
    slopes = np.stack([np.array([0.004, 0.002, 0.006]), np.zeros(3)])
    np.testing.assert_allclose(danabasoglu_taper(slopes), [0.5, 0.98201379, 0.01798621], atol=1e-8)
    # Gerdes et al. 1991, Climate Dynamics 5: min(1, (Smax/S)^2), direction does not matter.
    steep = np.array([[0.003, 0.012, 0.0], [0.004, 0.016, 0.0]])
    np.testing.assert_allclose(gerdes_taper(steep, largest=0.01), [1.0, 0.25, 1.0])


def test_slopes_of_a_linear_buoyancy():
    # b = N2 z + M2 y: S_y = -M2/N2.
    grid = level_grid(6, 7)
    depth = np.cumsum(grid.layer_thickness, axis=0) - 0.5 * grid.layer_thickness
    buoyancy = -1e-5 * depth + 2e-8 * grid.y[:, None]
    slopes = slopes_from_buoyancy(buoyancy, grid.layer_thickness, grid.geometry)
    np.testing.assert_allclose(slopes[0], 0.0, atol=1e-12)
    np.testing.assert_allclose(slopes[1], -2e-3, rtol=1e-9)
    unstable = slopes_from_buoyancy(-buoyancy, grid.layer_thickness, grid.geometry)
    assert np.isnan(unstable).all()


def test_neutral_slopes_are_those_of_density_at_the_pressure_of_the_place():
    grid = level_grid(9, 9, thickness=np.full(6, 10.0))
    rows = (np.arange(9) - 4.0)[:, None]
    columns = np.arange(9) - 4.0
    level = np.arange(6.0)[:, None, None]
    temperature = 283.15 - 0.05 * level + 0.02 * rows - 0.01 * columns
    salinity = 35.0 + 0.004 * level - 0.003 * rows + 0.006 * columns
    pressure = np.full(grid.shape, 1.0e7)
    found = neutral_slopes(temperature, salinity, pressure, grid.layer_thickness, grid.geometry)
    # Density referenced to that pressure, differenced over the neighbouring cells.
    density = Teos10Seawater("conservative", pressure).potential_density(
        temperature, salinity, 1.0e7
    )
    upward = (density[1, 4, 4] - density[3, 4, 4]) / 20.0
    along_x = (density[2, 4, 5] - density[2, 4, 3]) / 30e3
    along_y = (density[2, 5, 4] - density[2, 3, 4]) / 30e3
    np.testing.assert_allclose(found[:, 2, 4, 4], [-along_x / upward, -along_y / upward], rtol=1e-5)


def test_slopes_of_the_middles_of_layers():
    grid = level_grid(5, 6, thickness=(100.0, 300.0))
    thickness = np.array(grid.layer_thickness)
    tilt = 1e-3 * (grid.x - grid.x.mean())
    thickness[0] += tilt
    thickness[1] -= tilt
    slopes = slopes_of_layers(thickness, grid.sea_floor_depth, grid.geometry)
    # The surface is level, the interface falls by 1e-3, middles by half of it.
    np.testing.assert_allclose(slopes[0], -0.5e-3, rtol=1e-9)
    np.testing.assert_allclose(slopes[1], 0.0, atol=1e-15)


def test_bolus_velocity_of_a_tapered_coefficient_has_no_divergence_inside():
    # u* = -d_z(k S), w* = div_h(k S) (Gent et al. 1995, J. Phys. Oceanogr. 25, 463-474).
    grid = level_grid(5, 24, thickness=np.full(12, 50.0))
    depth = 25.0 + 50.0 * np.arange(12)[:, None, None]
    transport = np.sin(np.pi * depth / 600.0) * np.sin(2 * np.pi * grid.x / grid.x[-1])
    slopes = np.stack([transport * np.ones(grid.shape) * 1e-3, np.zeros(grid.shape)])
    skew = np.full(grid.shape, 1000.0)
    u, v, w = bolus_velocity(skew, slopes, grid.layer_thickness, grid.geometry)
    du = (u[1:-1, :, 2:] - u[1:-1, :, :-2]) / 30e3
    dw = (w[:-2] - w[2:])[:, :, 1:-1] / 100.0
    np.testing.assert_allclose(du + dw, 0.0, atol=1e-12)
    assert np.abs(du).max() > 1e-9
    np.testing.assert_array_equal(v, 0.0)
