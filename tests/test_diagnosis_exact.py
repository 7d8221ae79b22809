"""Transport tensors that are known exactly come back out of ensembles of tracers."""

from __future__ import annotations

import numpy as np
import pytest

from diagnosis_cases import GRADIENTS, box, uniform_eddies
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.moments import accumulate_moments
from learnclosure.diagnosis.tensor import (
    condition_number,
    down_gradient,
    least_squares_tensor,
    leverage,
    normal_equations,
    symmetric_parts,
)
from learnclosure.ensemble.grid import divergence, gradient
from learnclosure.study import DiagnosisSettings

SHAPE = (1, 2, 3)
AREA = np.ones(SHAPE)
COMPONENTS = [f"transport_tensor_{row}{column}" for row in "xy" for column in "xy"]


def spread(vectors):
    """Give (tracer, 2) vectors to every cell: (tracer, 2, layer, y, x)."""
    return np.asarray(vectors)[:, :, None, None, None] * np.ones(SHAPE)


def inverted(tensor, gradients):
    flux = -np.asarray(gradients) @ np.asarray(tensor).T
    return least_squares_tensor(normal_equations(spread(flux), spread(gradients), AREA))


def whole_grid():
    return Coarsening(box(), 1)


def diagnosed(ensemble, **settings):
    statistics = diagnose(ensemble, DiagnosisSettings(**settings))
    return np.stack([statistics[name].values for name in COMPONENTS]).reshape(2, 2, -1), statistics


# Spinning Ornstein-Uhlenbeck velocities: with memory T, rate of turning Omega and tracer
# relaxation lambda, S + i alpha = ub^2 (1 - exp(-w t))/w, w = 1/T + lambda - i Omega.
# Taylor 1922, Proc. London Math. Soc. 20, 196-212; Borgas, Flesch and Sawford 1997,
# J. Fluid Mech. 332, 141-171 (from memory; the formula is a two-line integral).
SPINNING = [
    # ub, T, Omega, lambda, t/T, S, alpha
    (0.1, 2e5, 2.5e-6, 0.0, np.inf, 1600.0, 800.0),
    (0.1, 2e5, 2.5e-6, 0.0, 10.0, 1599.94, 800.06),
    (0.1, 2e5, -2.5e-6, 0.0, 10.0, 1599.94, -800.06),
    (0.1, 2e5, 1e-5, 0.0, 10.0, 400.03, 799.97),
    (0.1, 2e5, 2.5e-6, 0.0, 1.0, 1224.55, 259.53),
    (0.1, 2e5, 2.5e-6, 5e-6, 20.0, 941.18, 235.29),
    (0.1, 1e5, 1e-5, 0.0, np.inf, 500.0, 500.0),
]


@pytest.mark.parametrize(("ub", "T", "Omega", "relaxation", "ages", "S", "alpha"), SPINNING)
def test_spinning_covariances_give_their_tensor(ub, T, Omega, relaxation, ages, S, alpha):
    rate = 1.0 / T + relaxation - 1j * Omega
    both = ub**2 * (1.0 - np.exp(-rate * ages * T) if np.isfinite(ages) else 1.0) / rate
    exact = np.array([[both.real, -both.imag], [both.imag, both.real]])
    assert exact[1] == pytest.approx([alpha, S], abs=0.006)
    found = inverted(exact, GRADIENTS)
    np.testing.assert_allclose(found, np.broadcast_to(exact, found.shape), rtol=1e-12)


def test_spinning_members_give_their_tensor_within_sampling_error():
    ub, T, Omega, relaxation, members = 0.1, 2e5, 2.5e-6, 5e-6, 4000
    random = np.random.default_rng(11)
    step = T / 50.0
    turn = np.exp((-1.0 / T + 1j * Omega) * step)
    kick = ub * np.sqrt(1.0 - np.exp(-2.0 * step / T))
    u = ub * (random.normal(size=members) + 1j * random.normal(size=members))
    X = np.zeros(members, complex)
    for _ in range(1000):
        after = turn * u + kick * (random.normal(size=members) + 1j * random.normal(size=members))
        X = ((1.0 - 0.5 * relaxation * step) * X + 0.5 * step * (u + after)) / (
            1.0 + 0.5 * relaxation * step
        )
        u = after
    moments = accumulate_moments(ensemble := uniform_eddies(box(), u[None], X[None]), whole_grid())
    names = ensemble.tracers
    slopes = np.stack([gradient(moments.whole.mean[name], box().geometry) for name in names])
    fluxes = np.stack([moments.whole.flux[name] for name in names])
    tensor = least_squares_tensor(normal_equations(fluxes, slopes, np.ones(box().shape)))
    exact = np.array([[941.18, -235.29], [235.29, 941.18]])
    # Standard error of a covariance of jointly Gaussian variables.
    error = np.sqrt((ub**2 * np.array([X.real.var(), X.imag.var()]) + exact**2) / members)
    assert np.all(error < 30.0)
    assert np.all(np.abs(tensor - exact) < 4.0 * error)


def wave_members(members, frequency, relaxation):
    """Phases spread evenly: sums over members are exact integrals over a period."""
    a, b = 0.1, 0.05
    phase = 2.0 * np.pi * np.arange(members) / members
    u = a * np.cos(phase) - 1j * b * np.sin(phase)
    both = relaxation**2 + frequency**2
    along_x = a * (relaxation * np.cos(phase) + frequency * np.sin(phase)) / both
    along_y = -b * (relaxation * np.sin(phase) - frequency * np.cos(phase)) / both
    return u[None], (along_x + 1j * along_y)[None]


# u = (a cos wt, -b sin wt), a = .1, b = .05 m/s, period 20 d. Plumb 1979, J. Atmos. Sci. 36,
# 1699-1704 (from memory); derived in two lines.
@pytest.mark.parametrize(
    ("relaxation", "exact"),
    [
        (1.0 / (50 * 86400.0), [[87.1881, 684.7741], [-684.7741, 21.7970]]),
        (0.0, [[0.0, 687.5494], [-687.5494, 0.0]]),
    ],
)
def test_plane_wave_members_give_the_antisymmetric_tensor_with_its_sign(relaxation, exact):
    members = 12
    u, X = wave_members(members, 2.0 * np.pi / (20 * 86400.0), relaxation)
    tensor, statistics = diagnosed(uniform_eddies(box(), u, X), floor=0.0)
    # Members with evenly spread phases are not a random sample: N/(N-1) too much.
    expected = np.array(exact) * members / (members - 1)
    np.testing.assert_allclose(
        tensor, np.broadcast_to(expected[..., None], tensor.shape), atol=2e-4
    )
    plain = statistics["least_squares_tensor_yx"].values
    np.testing.assert_allclose(plain, expected[1, 0], rtol=1e-6)
    # The tracer withheld has a flux that does not vary: there is nothing to explain.
    assert np.isnan(statistics["withheld_flux_skill"].values).all()
    alpha = statistics["antisymmetric_tensor"].values
    np.testing.assert_allclose(alpha, expected[1, 0], rtol=1e-6)


@pytest.mark.parametrize(("method", "tolerance"), [("projection", 1e-5), ("admm", 1e-2)])
def test_the_floor_keeps_the_antisymmetric_part_of_a_plane_wave(method, tolerance):
    u, X = wave_members(12, 2.0 * np.pi / (20 * 86400.0), 1.0 / (50 * 86400.0))
    tensor, statistics = diagnosed(uniform_eddies(box(), u, X), floor=50.0, floor_method=method)
    assert np.all(tensor[1, 1] >= 50.0 - 1e-9)
    np.testing.assert_allclose(tensor[1, 1], 50.0, atol=0.1)
    # Inside the fit, a raised component also moves those its gradients are correlated with.
    np.testing.assert_allclose(tensor[0, 0], 87.1881 * 12 / 11, rtol=tolerance)
    alpha = statistics["antisymmetric_tensor"]
    np.testing.assert_allclose(alpha, -684.7741 * 12 / 11, rtol=tolerance)
    assert np.all(statistics["floor_active"] == 1)


# Frame changes are K' = R K R^T, whatever the source.
CORNER = np.array([[3000.0, -500.0], [900.0, 1000.0]])


def test_inversion_in_turned_axes_gives_the_turned_tensor():
    angle = np.deg2rad(30.0)
    R = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    random = np.random.default_rng(5)
    flux, slope = random.normal(size=(2, 5, 2, *SHAPE))
    plain = least_squares_tensor(normal_equations(flux, slope, AREA))
    turn = np.einsum("ab,kblyx->kalyx", R, flux), np.einsum("ab,kblyx->kalyx", R, slope)
    turned = least_squares_tensor(normal_equations(*turn, AREA))
    np.testing.assert_allclose(turned, R @ plain @ R.T, rtol=1e-10)
    exact = [[2326.794919, 266.025404], [1666.025404, 1673.205081]]
    np.testing.assert_allclose(inverted(CORNER, GRADIENTS @ R.T)[0, 0, 0], CORNER, rtol=1e-12)
    np.testing.assert_allclose(R @ CORNER @ R.T, exact, rtol=1e-9)
    slopes = GRADIENTS @ R.T
    fluxes = -(GRADIENTS @ CORNER.T) @ R.T
    found = least_squares_tensor(normal_equations(spread(fluxes), spread(slopes), AREA))
    np.testing.assert_allclose(found, np.broadcast_to(exact, found.shape), rtol=1e-9)


def test_a_reflected_axis_changes_the_sign_of_the_antisymmetric_part_only():
    mirror = np.diag([1.0, -1.0])
    flux = -(GRADIENTS @ CORNER.T) @ mirror
    found = least_squares_tensor(normal_equations(spread(flux), spread(GRADIENTS @ mirror), AREA))
    np.testing.assert_allclose(found[0, 0, 0], [[3000.0, 500.0], [-900.0, 1000.0]], rtol=1e-12)
    S_xx, S_xy, S_yy, alpha = (part[0, 0, 0] for part in symmetric_parts(found))
    assert alpha == pytest.approx(-700.0)
    assert S_xx + S_yy == pytest.approx(4000.0)
    assert S_xx * S_yy - S_xy**2 == pytest.approx(2.96e6)
    assert np.linalg.det(found[0, 0, 0]) == pytest.approx(2.96e6 + 700.0**2)


def test_a_uniform_antisymmetric_tensor_moves_no_tracer():
    # div(alpha zhat x grad C) = 0 for constant alpha: a rotational flux.
    grid = box(2, 12, 16, dx=20e3, dy=30e3, periodic=(True, True))
    tracer = np.random.default_rng(2).normal(size=grid.shape)
    slope = np.stack(gradient(tracer, grid.geometry))[None]
    tensor = np.broadcast_to([[0.0, -800.0], [800.0, 0.0]], (*grid.shape, 2, 2))
    flux = down_gradient(tensor, slope)[0]
    assert np.abs(flux).max() > 1e-3
    spread_out = divergence(flux[0], flux[1], grid.geometry)
    assert np.abs(spread_out).max() < 1e-12 * np.abs(flux).max() / 20e3 * 10


def test_solid_rotation_of_flux_has_no_divergence_inside():
    grid = box(1, 9, 9)
    x, y = np.meshgrid(grid.x - grid.x.mean(), grid.y - grid.y.mean())
    spread_out = divergence(-y[None], x[None], grid.geometry)
    assert np.abs(spread_out[:, 1:-1, 1:-1]).max() < 1e-12


def test_three_tracers_of_a_worked_example_give_their_tensor():
    # Weighted least squares worked by hand: G = 1e-6 [[1,0,1],[0,1,1]].
    slopes = np.array([[1.0, 0.0], [0.0, 1.0], [1.0, 1.0]]) * 1e-6
    flux = np.array([[-0.0016, -0.0008], [0.0008, -0.0016], [-0.0008, -0.0024]])
    equations = normal_equations(spread(flux), spread(slopes), AREA)
    found = least_squares_tensor(equations)
    exact = [[1600.0, -800.0], [800.0, 1600.0]]
    np.testing.assert_allclose(found, np.broadcast_to(exact, found.shape), rtol=1e-12)
    # Each tracer counts alike whatever its size: 1, 1 and (1,1)/sqrt(2) make cond = sqrt(2).
    np.testing.assert_allclose(condition_number(equations.M), np.sqrt(2.0), rtol=1e-12)
    assert np.linalg.cond(slopes) == pytest.approx(np.sqrt(3.0))
    G = slopes.T @ slopes
    np.testing.assert_allclose(condition_number(np.array([G])), np.sqrt(3.0), rtol=1e-12)


@pytest.mark.parametrize(
    ("degrees", "condition"), [(1.0, 114.589), (5.0, 22.904), (30.0, 3.732), (90.0, 1.0)]
)
def test_two_gradients_at_an_angle_have_the_cotangent_of_half_of_it(degrees, condition):
    # Singular values of two unit vectors: sqrt(1 +- cos), so cond = cot(angle/2).
    angle = np.deg2rad(degrees)
    slopes = np.array([[1.0, 0.0], [np.cos(angle), np.sin(angle)]]) * 3e-6
    M = normal_equations(spread(slopes), spread(slopes), AREA).M
    np.testing.assert_allclose(condition_number(M), condition, rtol=3e-5)
    np.testing.assert_allclose(condition_number(M), 1.0 / np.tan(0.5 * angle), rtol=1e-9)


def test_leverages_of_the_tracers_used_add_up_to_two():
    # The trace of a hat matrix is the number of parameters of a row (Hoaglin and Welsch 1978,
    # Am. Stat. 32, 17-22; from memory).
    slopes = np.random.default_rng(8).normal(size=(5, 2, *SHAPE))
    equations = normal_equations(slopes, slopes, AREA)
    total = sum(leverage(equations, slope, AREA) for slope in slopes)
    np.testing.assert_allclose(total, 2.0, rtol=1e-10)


def test_a_known_relaxation_time_frees_the_tensor_of_its_bias():
    # Spinning velocities, tracers relaxed at the rate lambda (check: Taylor 1922 with the
    # memory shortened to 1/(1/T + lambda); derived): K(0) comes back from K(lambda).
    ub, T, spin, rate = 0.1, 2e5, 2.5e-6, 5e-6
    random = np.random.default_rng(0)
    members = 4000
    w = 1.0 / T + rate - 1j * spin
    # Jointly Gaussian velocity and displacement with the exact stationary covariances.
    cross = ub**2 / w
    u = ub * (random.normal(size=members) + 1j * random.normal(size=members))
    noise = random.normal(size=members) + 1j * random.normal(size=members)
    X = np.conj(cross) / ub**2 * u + 1e3 * noise
    u, X = u[None], X[None]
    chosen = DiagnosisSettings(
        coarsen=1, floor=0.0, floor_method="projection", relaxation_time=1.0 / rate,
        ceiling_draws=0,
    )  # fmt: skip
    found = diagnose(uniform_eddies(box(), u, X), chosen)
    exact = ub**2 / (1.0 / T - 1j * spin)
    biased = float(found["transport_tensor_xx"].mean())
    freed = float(found["transport_tensor_xx_without_relaxation"].mean())
    turned = float(found["transport_tensor_yx_without_relaxation"].mean())
    assert biased == pytest.approx(np.real(ub**2 / w), rel=0.06)
    assert freed == pytest.approx(np.real(exact), rel=0.12)
    assert turned == pytest.approx(np.imag(exact), rel=0.25)
    assert (found["relaxation_amplification"] > 1.0).all()
