"""Features of the column against published numbers and exact solutions."""

from __future__ import annotations

import numpy as np
import pytest

from features_cases import coordinates, level_state, mean_state
from learnclosure.features.inputs import compute_inputs
from learnclosure.features.scales import rhines_length
from learnclosure.features.stratification import deformation_radius, gravity_wave_speed


def test_the_eady_growth_rate_is_the_published_one():
    # Eady 1949, Tellus 1, 33-52: largest growth 0.3098168352 f U_z / N; here 7.74542e-7 s-1.
    state = level_state(8, buoyancy_frequency=2e-3, depth=4000.0, shear=5e-5, coriolis=1e-4)
    growth = compute_inputs(state)["eady_growth_rate"]
    np.testing.assert_allclose(growth, 7.74542e-7, rtol=1e-6)


def eady_eigenvalue(levels):
    """Largest growth rate over f U_z / N of the layered problem with uniform N and shear.

    Streamfunctions exp(i k (x - c t)) on layers with free-slip lids: (U - c)(L - k2) psi =
    -Q_y psi, where Q_y consists of the sheets of potential vorticity at top and bottom.
    """
    step = 1.0 / levels
    speed = step * (np.arange(levels) + 0.5)[::-1]
    stretch = np.zeros((levels, levels))
    for k in range(levels - 1):
        stretch[k, k] -= 1 / step**2
        stretch[k, k + 1] += 1 / step**2
        stretch[k + 1, k + 1] -= 1 / step**2
        stretch[k + 1, k] += 1 / step**2
    slope = -stretch @ speed
    best = 0.0
    for wave in np.linspace(1.4, 1.8, 41):
        operator = stretch - wave**2 * np.eye(levels)
        matrix = np.linalg.solve(operator, np.diag(speed) @ operator + np.diag(slope))
        best = max(best, wave * np.max(np.linalg.eigvals(matrix).imag))
    return best


def test_the_layered_eady_problem_converges_to_the_factor_used():
    # Second order: 20 and 40 layers give .309674 and .309779 (Eady 1949 in the limit).
    assert eady_eigenvalue(20) == pytest.approx(0.309674, abs=2e-5)
    assert eady_eigenvalue(40) == pytest.approx(0.309779, abs=2e-5)


def test_the_charney_green_number_of_a_worked_column():
    # beta N2 H/(f2 U_z) = 2e-11 x 4e-6 x 4000/(1e-8 x 5e-5) = .64 (Green 1960, from memory).
    state = level_state(
        8, buoyancy_frequency=2e-3, depth=4000.0, shear=5e-5, coriolis=1e-4, beta=2e-11
    )
    np.testing.assert_allclose(compute_inputs(state)["charney_green_number"], 0.64, rtol=1e-12)


@pytest.mark.parametrize("levels", [10, 50])
def test_the_deformation_radius_has_the_exact_error_of_its_differences(levels):
    # Constant N: R1 = N H/(pi f) = 25464.79 m; centred differences on n equal cells are high
    # by exactly (pi/2n)/sin(pi/2n) (eigenvalues of the second difference, a textbook result).
    state = level_state(levels, buoyancy_frequency=2e-3, depth=4000.0, shear=0.0, coriolis=1e-4)
    half = 0.5 * np.pi / levels
    exact = 2e-3 * 4000.0 / (np.pi * 1e-4)
    assert exact == pytest.approx(25464.79, abs=0.01)
    np.testing.assert_allclose(deformation_radius(state), exact * half / np.sin(half), rtol=1e-9)


def test_two_layers_have_the_closed_form_radius():
    # R_d = sqrt(g' H1 H2/(H1 + H2))/f = 38.7298 km (Pedlosky 1987, from memory).
    np.testing.assert_allclose(deformation_radius(mean_state()), 38729.8, rtol=1e-6)


@pytest.mark.parametrize(
    ("surface", "scale", "speed"),
    [(5.24e-3, 1300.0, 2.2382600), (1e-2, 500.0, 1.9102914), (5e-3, 1000.0, 1.7410570)],
)
def test_exponential_stratification_gives_the_bessel_speed(surface, scale, speed):
    # N = N0 exp(z/d), H = 4000 m: c1 from J0(x) Y0(x e^(-H/d)) = Y0(x) J0(x e^(-H/d)),
    # c1 = N0 d/x; the first column is Munk-like (Munk 1981, from memory).
    levels, depth = 400, 4000.0
    step = depth / levels
    interfaces = -step * np.arange(1, levels)
    frequency = surface * np.exp(interfaces / scale)
    state = mean_state(rows=2, columns=2, thickness=(step,) * levels, gravity=frequency**2 * step)
    np.testing.assert_allclose(gravity_wave_speed(state), speed, rtol=3e-4)


@pytest.mark.parametrize("shear", [0.10, 0.13, -0.03, -0.05])
def test_the_pv_gradient_changes_sign_at_the_phillips_limits(shear):
    # H1 = 1000, H2 = 3000, g' = .02, f = 1e-4, beta = 2e-11: unstable only if the shear
    # exceeds +.12 or falls below -.04 m/s (Phillips 1954, Tellus 6, 273-286).
    u = np.array([shear, 0.0])[:, None, None]
    state = mean_state(beta=2e-11, u=u)
    along_y = compute_inputs(state)["pv_gradient_y"]
    f1, f2 = 1e-8 / (0.02 * 1000.0), 1e-8 / (0.02 * 3000.0)
    np.testing.assert_allclose(along_y[0], 2e-11 + f1 * shear, rtol=1e-12)
    np.testing.assert_allclose(along_y[1], 2e-11 - f2 * shear, rtol=1e-12, atol=1e-26)
    unstable = along_y[0, 0, 0] * along_y[1, 0, 0] < 0.0
    assert unstable == (shear > 0.12 or shear < -0.04)


def test_uniform_shear_and_stratification_leave_beta_inside_the_column():
    # Q_y = beta - f d_z s exactly for linear shear and constant N (Pedlosky 1987).
    state = level_state(
        6, buoyancy_frequency=2e-3, depth=4000.0, shear=5e-5, coriolis=1e-4, beta=2e-11
    )
    inside = compute_inputs(state)["pv_gradient_y"][1:-1]
    np.testing.assert_allclose(inside, 2e-11, rtol=1e-9)


@pytest.mark.parametrize("hemisphere", [1.0, -1.0])
def test_topographic_beta_of_a_worked_slope_mirrors_with_the_hemisphere(hemisphere):
    # -(f/H) dH/dy = 2.5e-11 m-1 s-1 for f = 1e-4, H = 4000, dH/dy = -1e-3 (Rhines 1969).
    state = mean_state(rows=3, columns=4)
    _, y = coordinates(state)
    depth = 4000.0 - hemisphere * 1e-3 * (y - y[1])
    sloping = mean_state(rows=3, columns=4, coriolis=hemisphere * 1e-4, depth=depth)
    found = compute_inputs(sloping)["topographic_beta_y"][:, 1]
    np.testing.assert_allclose(found, 2.5e-11, rtol=1e-12)


def test_the_rhines_length_of_a_worked_flow():
    # sqrt(U/beta) = 70.711 km for U = .1 m/s, beta = 2e-11 (Rhines 1975).
    inputs = {
        "eddy_kinetic_energy_column": np.array([0.5 * 0.1**2]),
        "planetary_beta_x": np.zeros(1),
        "planetary_beta_y": np.array([2e-11]),
    }
    np.testing.assert_allclose(rhines_length(np, inputs), 70710.678, rtol=1e-8)


def test_near_the_equator_the_radius_is_the_equatorial_one():
    # sqrt(c/(2 beta)) within about five degrees (Chelton et al. 1998).
    state = mean_state(coriolis=1e-6, beta=2.3e-11)
    speed = gravity_wave_speed(state)
    np.testing.assert_allclose(deformation_radius(state), np.sqrt(speed / 4.6e-11), rtol=1e-12)
