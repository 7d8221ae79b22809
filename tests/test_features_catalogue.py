"""Features one by one against exact flows and worked numbers."""

from __future__ import annotations

import numpy as np
import pytest

from features_cases import coordinates, level_state, mean_state
from learnclosure.ensemble.grid import Geometry
from learnclosure.features.boundaries import FARTHEST, land_distance
from learnclosure.features.inputs import compute_inputs
from learnclosure.features.nearest import nearest_marked
from learnclosure.features.point_features import EVERY_GROUP, point_features
from learnclosure.features.potential_vorticity import potential_vorticity_gradient
from learnclosure.features.stratification import (
    radius_of_speed,
    vertical_modes,
    wkb_speed,
)

RADIUS = 2e-3 * 4000.0 / (np.pi * 1e-4)


def features(state, energy=False, frame="pv-gradient"):
    return point_features(np, compute_inputs(state), energy, EVERY_GROUP, frame)


def eady_column(levels=8, beta=2e-11, **changed):
    """Uniform N = 2e-3 s-1, U_z = 5e-5 s-1 over 4000 m at f = 1e-4 s-1."""
    values = {"buoyancy_frequency": 2e-3, "depth": 4000.0, "shear": 5e-5, "coriolis": 1e-4}
    return level_state(levels, beta=beta, **(values | changed))


@pytest.mark.parametrize(
    ("flow", "zeta", "strain", "divergence", "determinant", "balance"),
    [
        ("rotation", 2e-5, 0.0, 0.0, 1e-10, -1.0),
        ("shear", -1e-5, 1e-5, 0.0, 0.0, 0.0),
        ("strain", 0.0, 2e-5, 0.0, -1e-10, 1.0),
        ("expansion", 0.0, 0.0, 2e-5, 1e-10, 0.0),
    ],
)
def test_invariants_of_the_canonical_flows(flow, zeta, strain, divergence, determinant, balance):
    # Rate 1e-5 s-1, linear fields: exact for centred differences (Okubo 1970, Weiss 1991).
    # Without divergence OW = -4 det(grad u).
    x, y = coordinates(mean_state())
    a = 1e-5
    u, v = {
        "rotation": (-a * y, a * x),
        "shear": (a * y, 0.0 * x),
        "strain": (a * x, -a * y),
        "expansion": (a * x, a * y),
    }[flow]
    found = features(mean_state(u=u[None], v=v[None], beta=2e-11))
    f = 1e-4
    np.testing.assert_allclose(found["rossby_number"] * f, zeta, atol=1e-16)
    np.testing.assert_allclose(found["strain_ratio"] * f, strain, atol=1e-16)
    np.testing.assert_allclose(found["divergence_ratio"] * f, divergence, atol=1e-16)
    np.testing.assert_allclose(found["gradient_determinant"] * f**2, determinant, atol=1e-20)
    if strain or zeta:
        np.testing.assert_allclose(found["strain_balance"], balance, atol=1e-9)
    if not divergence:
        np.testing.assert_allclose(
            found["okubo_weiss_ratio"], -4.0 * found["gradient_determinant"], atol=1e-12
        )


def test_flow_that_speeds_up_is_stretched_along_itself():
    x, y = coordinates(mean_state())
    state = mean_state(u=0.1 + 1e-6 * x[None], v=-1e-6 * y[None], beta=2e-11)
    found = features(state)
    on_axis = found["acceleration_ratio"][:, 0]
    np.testing.assert_allclose(on_axis, 1e-6 / 1e-4, rtol=1e-9)
    np.testing.assert_allclose(found["strain_along_flow"][:, 0], 1.0, rtol=1e-9)


@pytest.mark.parametrize("hemisphere", [1.0, -1.0])
def test_lateral_shear_is_positive_where_speed_grows_poleward_in_an_eastward_flow(hemisphere):
    _, y = coordinates(mean_state())
    poleward = hemisphere * (y - y.mean())
    state = mean_state(u=0.3 + 1e-6 * poleward[None], coriolis=hemisphere * 1e-4, beta=2e-11)
    np.testing.assert_allclose(features(state)["lateral_shear_ratio"], 0.01, rtol=1e-9)


def test_richardson_number_slope_and_buoyancy_gradient_of_the_eady_column():
    # Ri = N2/U_z2 = 1600; M2 = f U_z = 5e-9 s-2 by thermal wind; slope M2/N2 = 1.25e-3;
    # f/sqrt(Ri) = |s| N (Eady 1949 numbers; identities of thermal wind).
    inputs = compute_inputs(eady_column())
    found = point_features(np, inputs, False, EVERY_GROUP)
    np.testing.assert_allclose(np.exp(found["log_richardson_number"]), 1600.0, rtol=1e-9)
    np.testing.assert_allclose(found["buoyancy_gradient_ratio"] * 1e-8, 5e-9, rtol=1e-12)
    slope = np.hypot(found["isoneutral_slope_across"], found["isoneutral_slope_along"])
    np.testing.assert_allclose(slope, 1.25e-3, rtol=1e-9)
    np.testing.assert_allclose(np.exp(found["log_frequency_ratio"]), 20.0, rtol=1e-9)
    np.testing.assert_allclose(slope * 2e-3, 1e-4 / np.sqrt(1600.0), rtol=1e-9)


@pytest.mark.parametrize("hemisphere", [1.0, -1.0])
def test_isoneutral_surfaces_rise_poleward_under_an_eastward_jet(hemisphere):
    # s_y = -b_y/N2 = f U_z/N2 (thermal wind), upward to the north where f > 0.
    state = eady_column(coriolis=hemisphere * 1e-4)
    found = features(state, frame="fixed")["isoneutral_slope_across"]
    np.testing.assert_allclose(found, 1.25e-3, rtol=1e-9)


def test_growth_rates_and_criticality_of_the_eady_column():
    # Largest growth .3098168352 f/sqrt(Ri) = 7.74542e-7 s-1 (Eady 1949).
    found = features(eady_column(levels=50))
    radius = RADIUS * 1.00016451
    np.testing.assert_allclose(found["eady_coriolis_ratio"] * 1e-4, 7.74542e-7, rtol=1e-6)
    np.testing.assert_allclose(found["eady_drift_ratio"], 7.74542e-7 / (2e-11 * radius), rtol=1e-5)
    np.testing.assert_allclose(found["eady_diffusivity"], 7.74542e-7 * radius**2, rtol=1e-5)


@pytest.mark.parametrize(
    ("shear", "criticality"),
    [(0.12, 1.0), (0.24, 2.0), (-0.04, 1.0), (-0.02, 0.5), (0.0, 0.0)],
)
def test_phillips_criticality_is_one_at_both_limits(shear, criticality):
    # H1 = 1000, H2 = 3000, g' = .02, f = 1e-4, beta = 2e-11: unstable above .12 and below
    # -.04 m/s (Phillips 1954).
    u = np.array([shear, 0.0])[:, None, None]
    for sign in (1.0, -1.0):
        state = mean_state(u=u, beta=2e-11, coriolis=sign * 1e-4)
        np.testing.assert_allclose(features(state)["phillips_criticality"], criticality, atol=1e-12)


def test_phillips_criticality_turns_with_the_axes():
    # Eastward is where the gradient of f lies to the left: along y if f grows along -x.
    state = mean_state(v=np.array([0.24, 0.0])[:, None, None])
    turned = type(state)(**{**state.__dict__, "planetary_beta_x": np.full((12, 14), -2e-11)})
    np.testing.assert_allclose(features(turned)["phillips_criticality"], 2.0, atol=1e-12)


@pytest.mark.parametrize(("shear", "reversed_"), [(0.10, False), (0.13, True), (-0.05, True)])
def test_potential_vorticity_gradients_oppose_each_other_beyond_the_limits(shear, reversed_):
    state = mean_state(u=np.array([shear, 0.0])[:, None, None], beta=2e-11)
    expected = -1.0 if reversed_ else 1.0
    np.testing.assert_allclose(features(state)["pv_gradient_reversal"], expected, rtol=1e-12)


def test_the_equal_layers_limit_is_twice_beta_times_the_square_of_the_radius():
    # |dU| > 2 beta R_d^2 = .0288 m/s for R_d = 30 km, beta = 1.6e-11 (Phillips 1954).
    gravity = (30e3 * 1e-4) ** 2 * 4000.0 / (2000.0 * 2000.0)
    state = mean_state(
        thickness=(2000.0, 2000.0), gravity=(gravity,), beta=1.6e-11,
        u=np.array([0.0288, 0.0])[:, None, None],
    )  # fmt: skip
    found = features(state)
    np.testing.assert_allclose(found["deformation_radius"], 30e3, rtol=1e-12)
    np.testing.assert_allclose(found["phillips_criticality"], 1.0, rtol=1e-12)


@pytest.mark.parametrize(
    ("surface", "scale", "speeds", "ratio"),
    [
        (5.24e-3, 1300.0, (2.2382600, 1.0659519), 0.92410),
        (1e-2, 500.0, (1.9102914, 0.8678852), 0.85310),
        (5e-3, 1000.0, (1.7410570, 0.8174209), 0.89739),
    ],
)
def test_exponential_stratification_gives_both_bessel_speeds_and_the_wkb_error(
    surface, scale, speeds, ratio
):
    # N = N0 exp(z/d), H = 4000 m: c = N0 d/x, J0(x) Y0(x e^(-H/d)) = Y0(x) J0(x e^(-H/d));
    # WKB: c = int N dz/pi. The first column is Munk-like (from memory). In the second N is
    # held at 1e-4 s-1 below 2303 m; without that the ratio would be .83287.
    levels, depth = 200, 4000.0
    step = depth / levels
    frequency = surface * np.exp(-step * np.arange(1, levels) / scale)
    state = mean_state(rows=1, columns=1, thickness=(step,) * levels, gravity=frequency**2 * step)
    modes = vertical_modes(state)
    np.testing.assert_allclose(modes.first_speed, speeds[0], rtol=2e-3)
    np.testing.assert_allclose(modes.second_speed, speeds[1], rtol=4e-3)
    np.testing.assert_allclose(wkb_speed(state) / modes.first_speed, ratio, rtol=5e-3)


def test_uniform_stratification_has_cosine_modes_and_an_exact_wkb_radius():
    # c_n = N H/(n pi), p_1 = sqrt(2) cos(pi z/H): high by (n pi/2m)/sin(n pi/2m) on m levels.
    state = eady_column(levels=40, shear=0.0)
    found = features(state)
    modes = vertical_modes(state)
    half = 0.5 * np.pi / 40
    np.testing.assert_allclose(wkb_speed(state), 2e-3 * 4000.0 / np.pi, rtol=1e-12)
    np.testing.assert_allclose(found["wkb_radius_ratio"], np.sin(half) / half, rtol=1e-9)
    np.testing.assert_allclose(
        modes.second_speed / modes.first_speed, np.sin(half) / np.sin(2 * half), rtol=1e-9
    )
    middle = (np.arange(40) + 0.5) / 40
    expected = np.sqrt(2.0) * np.cos(np.pi * middle)
    np.testing.assert_allclose(modes.amplitude[:, 0, 0], expected, atol=1e-9)


def test_two_layers_have_the_closed_form_mode():
    # Pressures in the ratio -H2/H1, unit mean square: sqrt(3) above, -1/sqrt(3) below for
    # H = 1000 and 3000 m (Gill 1982, section 6.2, from memory).
    amplitude = vertical_modes(mean_state()).amplitude
    np.testing.assert_allclose(amplitude[0], np.sqrt(3.0), rtol=1e-12)
    np.testing.assert_allclose(amplitude[1], -1.0 / np.sqrt(3.0), rtol=1e-12)
    assert not vertical_modes(mean_state()).second_speed.any()


def test_burger_and_froude_numbers_and_resolution_of_a_worked_column():
    # Without a jet the deformation radius stands in for its width: Bu = 1.
    state = mean_state(u=np.array([0.1, 0.1])[:, None, None], beta=2e-11, width=15e3)
    found = features(state)
    radius = np.sqrt(0.02 * 750.0) / 1e-4
    np.testing.assert_allclose(found["burger_number"], 1.0, rtol=1e-12)
    np.testing.assert_allclose(found["flow_froude_number"], 0.1 / (1e-4 * radius), rtol=1e-12)
    np.testing.assert_allclose(found["resolution_ratio"], 15e3 / radius, rtol=1e-12)
    # Rhines length sqrt(U/beta) = 70.711 km for .1 m/s, 2e-11 (Rhines 1975).
    np.testing.assert_allclose(found["flow_rhines_ratio"] * radius, 70710.678, rtol=1e-8)


def test_potential_vorticity_gradient_of_an_exponential_slope_and_its_two_diffusivities():
    # s = 1e-3 e^(z/1000), f = 1e-4, beta = 2e-11: Q_y = beta - f s_z, and a constant GM
    # coefficient is a PV diffusivity times kq/kG = f s_z/(f s_z - beta) = 1.25, 1.491968,
    # 2.191331, 9.646719 at 0, 500, 1000, 1500 m (Treguier et al. 1997; relation derived).
    levels, depth, beta, f = 400, 2000.0, 2e-11, 1e-4
    step = depth / levels
    frequency = 2e-3
    middle = -step * (np.arange(levels) + 0.5)
    u = frequency**2 / f * 1.0 * np.exp(middle / 1000.0)
    state = mean_state(
        rows=3, columns=3, thickness=(step,) * levels, coriolis=f, beta=beta,
        gravity=(frequency**2 * step,) * (levels - 1), u=u[:, None, None],
    )  # fmt: skip
    gradient = potential_vorticity_gradient(state, np.zeros((levels, 3, 3)))[1][:, 1, 1]
    stretching = beta - gradient
    for depth_of, ratio in ((500.0, 1.491968), (1000.0, 2.191331), (1500.0, 9.646719)):
        number = round(depth_of / step)
        at = 0.5 * (stretching[number - 1] + stretching[number])
        assert at / (at - beta) == pytest.approx(ratio, rel=2e-3)


@pytest.mark.parametrize("hemisphere", [1.0, -1.0])
def test_topography_of_a_worked_slope(hemisphere):
    # -(f/H) dH/dy = 2.5e-11 for f = 1e-4, H = 4000, dH/dy = -1e-3 (Rhines 1969): with beta
    # 2e-11 contours of f/H run along x, and |grad D| Ld/D is 2.5e-11 Ld/f.
    _, y = coordinates(mean_state(rows=3, columns=4))
    depth = 4000.0 - hemisphere * 1e-3 * (y - y[1])
    state = mean_state(
        rows=3, columns=4, coriolis=hemisphere * 1e-4, beta=2e-11, depth=depth,
        u=np.array([0.1, 0.0])[:, None, None],
    )  # fmt: skip
    found = {name: v[:, 1] for name, v in features(state, frame="fixed").items() if v.ndim == 3}
    np.testing.assert_allclose(found["topographic_beta_across"] * 2e-11, 2.5e-11, rtol=1e-9)
    np.testing.assert_allclose(found["depth_contour_across"], 1.0, rtol=1e-9)
    np.testing.assert_allclose(found["depth_contour_along"], 0.0, atol=1e-12)
    np.testing.assert_allclose(found["depth_contour_crossing"], 0.0, atol=1e-12)
    radius = np.sqrt(0.02 * 750.0) / 1e-4
    np.testing.assert_allclose(found["topographic_steepness"], 2.5e-7 * radius, rtol=1e-9)
    # The sea floor rises poleward by 1e-3, isoneutral surfaces by f dU/g' = 5e-4 there.
    np.testing.assert_allclose(found["slope_ratio"], 1e-3 / 5e-4, rtol=1e-9)


def test_angles_between_flow_and_shear():
    for turned, cosine, sine in ((0.0, 1.0, 0.0), (90.0, 0.0, 1.0), (-30.0, 0.8660254, -0.5)):
        angle = np.radians(turned)
        below = np.array([[[0.1]]])
        u = np.concatenate([below + 0.05 * np.cos(angle), below])
        v = np.concatenate([0.0 * below + 0.05 * np.sin(angle), 0.0 * below])
        found = features(mean_state(u=u, v=v, beta=2e-11))
        np.testing.assert_allclose(found["shear_flow_cosine"][1], cosine, atol=1e-7)
        np.testing.assert_allclose(found["shear_flow_sine"][1], sine, atol=1e-7)


def test_flow_relative_to_the_column_and_its_share():
    # Mean of .4 over 1000 m and 0 over 3000 m is .1 m/s: shares .01/(.01+.09), .01/(.01+.01).
    state = mean_state(u=np.array([0.4, 0.0])[:, None, None], beta=2e-11)
    found = features(state, frame="fixed")
    drift = 2e-11 * 0.02 * 750.0 / 1e-8
    # The second axis points west.
    np.testing.assert_allclose(found["relative_flow_along"][0], -0.3 / drift, rtol=1e-9)
    np.testing.assert_allclose(found["relative_flow_along"][1], 0.1 / drift, rtol=1e-9)
    np.testing.assert_allclose(found["column_flow_share"][0], 0.1, rtol=1e-9)
    np.testing.assert_allclose(found["column_flow_share"][1], 0.5, rtol=1e-9)
    np.testing.assert_allclose(found["thickness_share"][0], 0.25)


@pytest.mark.parametrize("periodic", [(False, False), (True, False), (True, True)])
def test_the_nearest_marked_cell_is_the_one_a_search_of_all_finds(periodic):
    random = np.random.default_rng(7)
    rows, columns = 23, 37
    dx = np.broadcast_to(random.uniform(5e3, 15e3, columns), (rows, columns))
    dy = np.broadcast_to(random.uniform(5e3, 15e3, (rows, 1)), (rows, columns))
    marked = random.uniform(size=(rows, columns)) < 0.02
    geometry = Geometry(dx, dy, np.ones((1, rows, columns), bool), *periodic)
    found = nearest_marked(marked, geometry)
    x, y = np.cumsum(dx[0]) - 0.5 * dx[0], np.cumsum(dy[:, 0]) - 0.5 * dy[:, 0]
    best = np.full((rows, columns), np.inf)
    for j, i in np.argwhere(marked):
        along_x, along_y = x[None, :] - x[i], y[:, None] - y[j]
        if periodic[0]:
            along_x = along_x - dx[0].sum() * np.round(along_x / dx[0].sum())
        if periodic[1]:
            along_y = along_y - dy[:, 0].sum() * np.round(along_y / dy[:, 0].sum())
        best = np.minimum(best, np.hypot(along_x, along_y))
    distance = np.hypot(found.along_x, found.along_y)
    assert np.mean(np.abs(distance - best) < 1e-6) > 0.99
    np.testing.assert_allclose(distance, best, rtol=0.1, atol=1e-6)


def test_distance_to_coasts_and_walls():
    mask = np.ones((1, 20, 30), bool)
    mask[:, :, 0] = False
    width = np.full((20, 30), 10e3)
    channel = land_distance(Geometry(width, width, mask, True, False))
    # Columns 1 and 29 touch the land column, rows 0 and 19 the walls.
    assert channel[10, 1] == channel[10, 29] == 5e3
    assert channel[10, 4] == pytest.approx(35e3)
    assert channel[0, 15] == channel[19, 15] == 5e3
    open_sea = Geometry(width, width, np.ones((1, 20, 30), bool), True, True)
    assert np.all(land_distance(open_sea) == FARTHEST)


def test_the_second_radius_of_a_slow_mode_is_bounded_by_the_least():
    assert radius_of_speed(mean_state(), np.full((12, 14), 1e-6)).max() == 1e3
