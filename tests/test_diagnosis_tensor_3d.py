"""Tensors in depth axes: gradients, inversion, parts, and what a whole diagnosis makes of them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diagnosis_cases import MemoryEnsemble
from layers_cases import level_grid
from learnclosure.diagnosis.depth_axes import along_layers, in_depth_axes
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.isoneutral import depth_tensor
from learnclosure.diagnosis.tensor_3d import (
    condition_number_3d,
    down_gradient_3d,
    joined_tensor,
    least_squares_tensor_3d,
    normal_equations_3d,
    smooth_tensor_3d,
    split_tensor,
    vertical_gradient,
    without_growth,
)
from learnclosure.errors import DiagnosisError
from learnclosure.study import DiagnosisSettings

quick = settings(max_examples=25, deadline=None, derandomize=True)
PLAIN = DiagnosisSettings(coarsen=1, smoothing_length=30e3)
TRACERS = np.array(
    [[1e-6, 0, 2e-3], [0.3e-6, 0.9e-6, -1e-3], [-0.6e-6, 0.7e-6, 1e-3], [0.2e-6, -1e-6, 3e-3]]
)
"""Gradients of four tracers: vertical ones are a thousand times steeper."""
TRUE = depth_tensor(np.array([[900.0, -400.0], [100.0, 500.0]]), 700.0, np.array([1e-3, -2e-3]))


def spread(vector, grid):
    return vector[..., None, None, None] * np.ones(grid.shape)


def equations_of(tensor, gradients, grid):
    gradient = spread(gradients, grid)
    flux = -np.einsum("ab,kblyx->kalyx", tensor, gradient)
    return normal_equations_3d(flux, gradient, grid.geometry.area * grid.geometry.mask)


def test_vertical_gradients_of_parabolas_are_exact_inside():
    grid = level_grid(2, 3)
    height = -(np.cumsum(grid.layer_thickness, axis=0) - 0.5 * grid.layer_thickness)
    found = vertical_gradient(
        1e-6 * height**2 - 3e-3 * height, grid.layer_thickness, grid.geometry.mask
    )
    np.testing.assert_allclose(found[1:-1], (2e-6 * height - 3e-3)[1:-1], rtol=1e-10)


def test_vertical_gradients_end_at_the_sea_floor():
    mask = np.ones((6, 2, 3), bool)
    mask[3:, 0, 0] = False
    mask[1:, 1, 1] = False
    grid = level_grid(2, 3, mask=mask)
    height = -(np.cumsum(grid.layer_thickness, axis=0) - 0.5 * grid.layer_thickness)
    field = np.where(mask, 5.0 * height, 1e30)
    found = vertical_gradient(field, grid.layer_thickness, mask)
    expected = np.where(mask, 5.0, 0.0)
    expected[0, 1, 1] = 0.0
    np.testing.assert_allclose(found, expected)


def test_a_known_tensor_comes_back():
    # The inversion of more tracers than unknowns is exact where one tensor carries all.
    grid = level_grid(3, 4)
    equations = equations_of(TRUE, TRACERS, grid)
    found = least_squares_tensor_3d(equations)
    np.testing.assert_allclose(found, spread_tensor(TRUE, grid), rtol=1e-9, atol=1e-12)
    assert condition_number_3d(equations).max() < 10.0


def spread_tensor(tensor, grid):
    return np.broadcast_to(tensor, (*grid.shape, 3, 3))


@quick
@given(seed=st.integers(0, 1000), factor=st.floats(1e-3, 1e3))
def test_another_unit_of_height_changes_components_by_their_powers_of_it(seed, factor):
    random = np.random.default_rng(seed)
    grid = level_grid(2, 3)
    gradient = random.normal(size=(5, 3, *grid.shape)) * [[[[[1e-6]]], [[[1e-6]]], [[[1e-3]]]]]
    flux = random.normal(size=gradient.shape) * [[[[[1e-3]]], [[[1e-3]]], [[[1e-6]]]]]
    area = grid.geometry.area * grid.geometry.mask
    one = normal_equations_3d(flux, gradient, area)
    unit = np.array([1.0, 1.0, factor])[:, None, None, None]
    other = normal_equations_3d(flux * unit, gradient / unit, area)
    np.testing.assert_allclose(condition_number_3d(one), condition_number_3d(other), rtol=1e-6)
    power = unit.ravel()[:, None] * unit.ravel()
    np.testing.assert_allclose(
        least_squares_tensor_3d(other), least_squares_tensor_3d(one) * power, rtol=1e-6
    )
    np.testing.assert_allclose(
        smooth_tensor_3d(other, grid.geometry, area, 2e4),
        smooth_tensor_3d(one, grid.geometry, area, 2e4) * power,
        rtol=1e-6,
        atol=1e-9,
    )


@quick
@given(seed=st.integers(0, 1000))
def test_least_squares_are_those_of_lstsq_with_the_same_weights(seed):
    random = np.random.default_rng(seed)
    grid = level_grid(2, 3)
    scale = np.array([1e-6, 1e-6, 1e-3])
    gradient = random.normal(size=(5, 3, *grid.shape)) * scale[:, None, None, None]
    flux = random.normal(size=gradient.shape)
    area = grid.geometry.area * grid.geometry.mask
    equations = normal_equations_3d(flux, gradient, area)
    found = least_squares_tensor_3d(equations)
    for place in ((0, 0, 0), (5, 1, 2)):
        if condition_number_3d(equations)[place] > 50.0:
            assert np.isnan(found[place]).all()
            continue
        stretch = np.array([1.0, 1.0, equations.stretching[place[0]]])
        square = (gradient[:, :, place[0]] ** 2).mean(axis=(-2, -1))
        weight = np.sqrt(1.0 / (square / stretch**2).sum(axis=1))[:, None]
        left, right = gradient[(..., *place)] * weight, -flux[(..., *place)] * weight
        expected = np.linalg.lstsq(left, right, rcond=None)[0].T
        np.testing.assert_allclose(found[place], expected, rtol=1e-6)


def test_two_directions_do_not_determine_three():
    flat = TRACERS * [1.0, 1.0, 0.0]
    equations = equations_of(TRUE, flat, level_grid(2, 3))
    assert np.isinf(condition_number_3d(equations)).all()
    assert np.isnan(least_squares_tensor_3d(equations)).all()


def test_a_uniform_tensor_is_as_smooth_as_can_be_and_reaches_cells_without_data():
    mask = np.ones((6, 5, 6), bool)
    mask[:, 0, :2] = False
    mask[4:, 3:, 3:] = False
    grid = level_grid(5, 6, mask=mask)
    area = grid.geometry.area * mask
    gradient = spread(TRACERS, grid) * mask
    gradient[:, :, :, 2, 2] = 0.0
    flux = -np.einsum("ab,kblyx->kalyx", TRUE, gradient)
    found = smooth_tensor_3d(normal_equations_3d(flux, gradient, area), grid.geometry, area, 2e4)
    expected = np.where(mask[..., None, None], TRUE, 0.0)
    np.testing.assert_allclose(found, expected, rtol=1e-6, atol=1e-9)


def test_smoothing_brings_noisy_tensors_nearer_to_the_truth():
    grid = level_grid(10, 12)
    random = np.random.default_rng(3)
    gradient = spread(TRACERS, grid)
    clean = -np.einsum("ab,kblyx->kalyx", TRUE, gradient)
    flux = clean + random.normal(size=clean.shape) * np.abs(clean).mean(
        axis=(0, 2, 3, 4), keepdims=True
    )
    area = grid.geometry.area * grid.geometry.mask
    equations = normal_equations_3d(flux, gradient, area)
    scale = np.array([1.0, 1.0, equations.stretching[0]])
    weigh = scale[:, None] * scale
    errors = [
        np.sqrt((((tensor - TRUE) * weigh) ** 2).mean())
        for tensor in (
            least_squares_tensor_3d(equations),
            smooth_tensor_3d(equations, grid.geometry, area, 30e3),
        )
    ]
    assert errors[1] < 0.6 * errors[0]


@quick
@given(seed=st.integers(0, 1000))
def test_tensors_are_split_and_joined(seed):
    random = np.random.default_rng(seed)
    tensor, g = random.normal(size=(4, 3, 3)), random.normal(size=3)
    symmetric, vector = split_tensor(tensor)
    np.testing.assert_allclose(joined_tensor(symmetric, vector), tensor, atol=1e-14)
    np.testing.assert_array_equal(symmetric, np.swapaxes(symmetric, -1, -2))
    np.testing.assert_allclose((tensor - symmetric) @ g, np.cross(vector, g), atol=1e-12)
    # The upward component is the alpha of a 2x2 tensor.
    np.testing.assert_allclose(vector[:, 2], 0.5 * (tensor[:, 1, 0] - tensor[:, 0, 1]))


@quick
@given(seed=st.integers(0, 1000))
def test_growth_is_taken_away_and_nothing_else(seed):
    random = np.random.default_rng(seed)
    stretching = np.array([1000.0, 300.0])
    scale = np.ones((2, 3))
    scale[:, 2] = stretching
    stretch = (scale[:, :, None] * scale[:, None, :])[:, None, None]
    tensor = random.normal(size=(2, 2, 3, 3, 3)) / stretch
    tensor[0, 0, 0] = TRUE
    bounded = without_growth(tensor, stretching)
    symmetric, vector = split_tensor(bounded)
    assert np.linalg.eigvalsh(symmetric * stretch).min() > -1e-9
    np.testing.assert_allclose(vector, split_tensor(tensor)[1], atol=1e-15)
    np.testing.assert_allclose(bounded[0, 0, 0], TRUE, rtol=1e-6, atol=1e-9)


def heaving_ensemble(grid, *, members=6, times=3, slope=-1e-3, tracers=TRACERS):
    """Carry linear tracers by velocities uniform in space; K is the sample covariance."""
    random = np.random.default_rng(5)
    scale = np.array([1.0, 1.0, 1e-3])
    velocity = 0.1 * random.normal(size=(times, members, 3)) * scale
    moved = 2e4 * random.normal(size=(times, members, 3)) * scale + 2e5 * velocity
    height = -(np.cumsum(grid.layer_thickness, axis=0) - 0.5 * grid.layer_thickness)
    everywhere = np.ones(grid.shape)
    place = np.stack([grid.x * everywhere, grid.y[:, None] * everywhere, height])
    values = {
        f"{axis}_velocity": velocity[..., number, None, None, None] * everywhere
        for number, axis in enumerate("xyz")
    }
    for letter, gradient in zip("abcd", tracers, strict=False):
        shifted = place - moved[..., None, None, None]
        values[f"dye_{letter}"] = np.einsum("b,tmblyx->tmlyx", gradient, shifted)
    values["buoyancy"] = np.broadcast_to(1e-5 * (height - slope * grid.x), values["dye_a"].shape)
    names = tuple(name for name in values if name.startswith("dye"))
    departure = [part - part.mean(axis=1, keepdims=True) for part in (velocity, moved)]
    tensor = np.einsum("tma,tmb->ab", *departure) / (members - 1) / times
    return MemoryEnsemble(grid, values, names), tensor


@pytest.fixture(scope="module")
def diagnosed():
    grid = level_grid(5, 6)
    ensemble, tensor = heaving_ensemble(grid)
    return diagnose(ensemble, PLAIN), tensor


def test_the_whole_diagnosis_returns_the_covariance_of_velocity_and_displacement(diagnosed):
    # Taylor 1921: c' = -G.X gives J = -<u X> G, all nine components, vertical ones included.
    statistics, tensor = diagnosed
    for name in ("depth_tensor", "least_squares_depth_tensor"):
        for a, row in enumerate("xyz"):
            for b, column in enumerate("xyz"):
                found = statistics[f"{name}_{row}{column}"].values
                np.testing.assert_allclose(found, tensor[a, b], rtol=1e-6)
    assert statistics["depth_tensor_xz"].attrs["units"] == "m2 s-1"
    assert "along z" in statistics["depth_tensor_xz"].attrs["long_name"]


def test_upward_fluxes_and_gradients_are_kept_with_their_units(diagnosed):
    statistics, tensor = diagnosed
    np.testing.assert_allclose(
        statistics["dye_b_eddy_flux_z"], -(tensor @ TRACERS[1])[2], rtol=1e-9
    )
    np.testing.assert_allclose(statistics["dye_b_gradient_z"], TRACERS[1, 2], rtol=1e-9)
    assert statistics["dye_b_gradient_z"].attrs["units"] == "m-1"


def test_slopes_are_those_of_the_mean_buoyancy(diagnosed):
    statistics, _ = diagnosed
    np.testing.assert_allclose(statistics["isoneutral_slope_x"], -1e-3, rtol=1e-9)
    np.testing.assert_allclose(statistics["isoneutral_slope_y"], 0.0, atol=1e-12)


def test_hosts_on_layers_are_served_from_depth_axes(diagnosed):
    statistics, tensor = diagnosed
    found = along_layers(statistics)
    np.testing.assert_allclose(found["transport_tensor_yx"], tensor[1, 0], rtol=1e-6)
    # k = (S.(K_zh - K_hz))/(2 S^2) with one slope.
    expected = (tensor[2, 0] - tensor[0, 2]) / (2.0 * -1e-3)
    np.testing.assert_allclose(found["skew_diffusivity"], expected, rtol=1e-4)
    np.testing.assert_allclose(statistics["skew_diffusivity"], expected, rtol=1e-4)


def test_hosts_on_levels_are_served_from_layers(diagnosed):
    statistics, _ = diagnosed
    found = in_depth_axes(statistics, skew_diffusivity=300.0)
    inside = np.array(
        [
            [statistics[f"transport_tensor_{row}{column}"].values[0, 0, 0] for column in "xy"]
            for row in "xy"
        ]
    )
    expected = depth_tensor(inside, 300.0, np.array([-1e-3, 0.0]))
    for a, row in enumerate("xyz"):
        for b, column in enumerate("xyz"):
            np.testing.assert_allclose(
                found[f"depth_tensor_{row}{column}"].values[0, 0, 0], expected[a, b], atol=1e-9
            )
    assert found["depth_tensor_zz"].attrs["units"] == "m2 s-1"


def test_without_upward_velocity_there_is_no_tensor_in_depth_axes():
    ensemble, _ = heaving_ensemble(level_grid(4, 5))
    del ensemble.values["z_velocity"]
    statistics = diagnose(ensemble, PLAIN)
    assert "depth_tensor_zz" not in statistics
    with pytest.raises(DiagnosisError, match="hold no tensor in depth axes"):
        along_layers(statistics)


def test_two_tracers_do_not_determine_a_tensor_in_depth_axes():
    ensemble, _ = heaving_ensemble(level_grid(4, 5), tracers=TRACERS[:2])
    with pytest.raises(DiagnosisError, match=r"needs three tracers .*found 2 \(dye_a, dye_b\)"):
        diagnose(ensemble, PLAIN)


def test_fluxes_down_the_gradient():
    grid = level_grid(2, 2)
    tensor = np.array(spread_tensor(TRUE, grid))
    tensor[0, 0, 0, 0, 0] = np.nan
    flux = down_gradient_3d(tensor, spread(TRACERS, grid))
    np.testing.assert_allclose(flux[:, :, 1, 1, 1], -(TRACERS @ TRUE.T))
    assert (flux[:, :, 0, 0, 0] == 0.0).all()


def deep_water_waves(grid, *, height, wavelength, members=8):
    """Members at evenly spread phases of one wave, tracers displaced by it to first order."""
    wavenumber = 2.0 * np.pi / wavelength
    frequency = np.sqrt(9.81 * wavenumber)
    z = -(np.cumsum(grid.layer_thickness, axis=0) - 0.5 * grid.layer_thickness)
    phase = (2.0 * np.pi * np.arange(members) / members)[None, :, None, None, None]
    size = height * np.exp(wavenumber * z)
    still = np.zeros((1, members, *grid.shape))
    moved = np.stack([-size * np.sin(phase), still, size * np.cos(phase)])
    values = {
        "x_velocity": frequency * size * np.cos(phase),
        "y_velocity": still,
        "z_velocity": frequency * size * np.sin(phase),
        "buoyancy": still + 1e-4 * z,
    }
    for letter, gradient in zip("abcd", TRACERS * [1e6, 1e6, 1e3], strict=True):
        place = (grid.x, grid.y[:, None], z)
        values[f"dye_{letter}"] = sum(
            slope * (at - shift) for slope, at, shift in zip(gradient, place, moved, strict=True)
        )
    return MemoryEnsemble(grid, values, ("dye_a", "dye_b", "dye_c", "dye_d")), frequency * size**2


def test_the_antisymmetric_tensor_of_a_deep_water_wave_carries_its_stokes_drift():
    # Plumb 1979, J. Atmos. Sci. 36, 1699-1704 (from memory): K_xz = a^2 w exp(2 k z)/2 = -K_zx,
    # nothing else, and u_S = d_z K_xz = a^2 w k exp(2 k z), .0493292 m/s at the surface for
    # a = 1 m, 100 m long, g = 9.81 (worked from the formula).
    members = 8
    grid = level_grid(3, 4, thickness=np.full(20, 1.0))
    ensemble, squared = deep_water_waves(grid, height=1.0, wavelength=100.0, members=members)
    statistics = diagnose(ensemble, PLAIN)
    unbiased = members / (members - 1)
    expected = 0.5 * unbiased * squared
    for pair, sign in (("xz", 1.0), ("zx", -1.0), ("xx", 0.0), ("zz", 0.0), ("yy", 0.0)):
        found = statistics[f"least_squares_depth_tensor_{pair}"].values
        np.testing.assert_allclose(found, sign * expected, rtol=1e-6, atol=1e-6)
    across = statistics["least_squares_depth_tensor_xz"].values / unbiased
    drift = vertical_gradient(across, grid.layer_thickness, grid.geometry.mask)[1:-1, 0, 0]
    z = -(np.arange(1, 19) + 0.5)
    surface = 0.0493292
    # Second-order differences of an exponential err by (2 k dz)^2/6 = .26 %.
    np.testing.assert_allclose(drift, surface * np.exp(4.0 * np.pi / 100.0 * z), rtol=3.5e-3)
