"""Ensembles of spinning velocities: errors of the tensor are those sampling allows, no more."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from scipy.stats import chi2

from diagnosis_cases import GRADIENTS, MemoryEnsemble, box, uniform_eddies
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.moments import accumulate_moments
from learnclosure.diagnosis.relaxation import without_relaxation
from learnclosure.diagnosis.tensor import least_squares_tensor, normal_equations
from learnclosure.ensemble.grid import gradient
from learnclosure.simulate.exact import exact_spinning_tensor
from learnclosure.study import DiagnosisSettings

UB, T = 0.1, 2e5
POOL = 10_000
# Omega, lambda, age in memory times: tracers that settle, and tracers still spreading.
SETTLED, YOUNG = (2.5e-6, 5e-6, 10.0), (-2.5e-6, 0.0, 1.0)


@cache
def spun(Omega, relaxation, ages):
    """Step independent realisations exactly; displacements by the trapezoid rule."""
    random = np.random.default_rng(20)
    step = T / 25.0

    def draw():
        return random.normal(size=(POOL, 2)) @ np.array([1.0, 1j])

    turn, decay = np.exp((-1.0 / T + 1j * Omega) * step), np.exp(-relaxation * step)
    kick = UB * np.sqrt(-np.expm1(-2.0 * step / T))
    u, X = UB * draw(), np.zeros(POOL, complex)
    for _ in range(round(25 * ages)):
        after = turn * u + kick * draw()
        X = decay * X + 0.5 * step * (decay * u + after)
        u = after
    return u, X


def spread_of_displacement(Omega, relaxation, ages):
    """Mean square of X_x: S/lambda when settled, Taylor's double integral before."""
    if relaxation:
        return exact_spinning_tensor(UB, T, Omega, relaxation=relaxation)[0, 0] / relaxation
    w, t = 1.0 / T - 1j * Omega, ages * T
    return 2.0 * UB**2 * (t / w - (1.0 - np.exp(-w * t)) / w**2).real


def sampled_tensors(members, case):
    """Tensors of as many independent ensembles as the pool holds, one to the layer."""
    u, X = (values.reshape(members, -1) for values in spun(*case))
    grid = box(u.shape[1], 2, 2)
    everywhere = np.ones((1, members, *grid.shape))
    cell = (None, ..., None, None)
    place = grid.x[None, :] + 1j * grid.y[:, None] - X[cell]
    values = {"x_velocity": u.real[cell] * everywhere, "y_velocity": u.imag[cell] * everywhere}
    names = ("dye_a", "dye_b", "dye_c")
    for name, (g_x, g_y) in zip(names, GRADIENTS, strict=False):
        values[name] = (g_x * place.real + g_y * place.imag) * everywhere
    moments = accumulate_moments(MemoryEnsemble(grid, values, names), Coarsening(grid, 1)).whole
    slopes = np.stack([gradient(moments.mean[name], grid.geometry) for name in names])
    fluxes = np.stack([moments.flux[name] for name in names])
    found = least_squares_tensor(normal_equations(fluxes, slopes, np.ones(grid.shape)))
    assert np.ptp(found, axis=(1, 2)).max() < 1e-3
    return found[:, 0, 0]


def sampling_covariance(exact, square, members):
    """Covariance of the four components of a covariance of Gaussian u and X, (xx, xy, yx, yy).

    Wishart 1928, Biometrika 20A, 32-52 (from memory): <u_i u_k><X_j X_l> + <u_i X_l><u_k X_j>.
    """
    both = np.einsum("ik,jl->ijkl", UB**2 * np.eye(2), square * np.eye(2))
    both = both + np.einsum("il,kj->ijkl", exact, exact)
    return both.reshape(4, 4) / (members - 1)


# Taylor 1922, Proc. London Math. Soc. 20, 196-212; Borgas, Flesch and Sawford 1997, J. Fluid
# Mech. 332, 141-171 (from memory): S + i alpha = ub^2 (1 - exp(-w t))/w.
@pytest.mark.parametrize("case", [SETTLED, YOUNG], ids=["settled", "young"])
@pytest.mark.parametrize("members", [5, 20, 100, 1000])
def test_errors_over_many_seeds_are_those_of_sampling(members, case):
    Omega, relaxation, ages = case
    exact = exact_spinning_tensor(UB, T, Omega, relaxation=relaxation, time=ages * T)
    error = sampled_tensors(members, case).reshape(-1, 4) - exact.ravel()
    seeds = len(error)
    assert seeds == POOL // members
    square = spread_of_displacement(*case)
    covariance = sampling_covariance(exact, square, members)
    standard_error = np.sqrt((UB**2 * square + exact**2).ravel() / (members - 1))
    np.testing.assert_allclose(np.sqrt(np.diag(covariance)), standard_error, rtol=1e-12)
    # The mean over seeds has no bias: with 1/N it would have 1/N of the tensor.
    assert np.all(np.abs(error.mean(axis=0)) < 4.0 * standard_error / np.sqrt(seeds))
    # Sums of squares: chi-square of each seed has the mean 4 exactly, at any number of members.
    squares = np.einsum("si,ij,sj->s", error, np.linalg.inv(covariance), error)
    assert abs(squares.mean() - 4.0) < 4.0 * squares.std() / np.sqrt(seeds)
    if members >= 100:
        # Nearly Gaussian: the sum is chi-square distributed and no error is beyond five.
        assert chi2.cdf(squares.sum(), 4 * seeds) == pytest.approx(0.5, abs=0.4999)
        assert np.abs(error).max() < 5.0 * standard_error.max()
    if members == 1000:
        assert np.all(np.abs(error) < 4.0 * np.sqrt(np.diag(covariance)))


def test_five_members_with_one_over_n_would_be_caught():
    exact = exact_spinning_tensor(UB, T, SETTLED[0], relaxation=SETTLED[1])
    tensors = sampled_tensors(5, SETTLED)
    bound = 4.0 * tensors.std(axis=0) / np.sqrt(len(tensors))
    mean = tensors.mean(axis=0)
    assert np.all(np.abs(mean - exact) < bound)
    assert np.all(np.abs(0.8 * mean - exact) > bound, where=np.eye(2, dtype=bool))


def test_the_tabled_standard_error_is_that_of_the_formula():
    # ub .1, T 2e5, Omega 2.5e-6, t = 10 T, a hundred thousand members: 25 m2/s.
    square = spread_of_displacement(2.5e-6, 0.0, 10.0)
    assert square == pytest.approx(6.016e9, rel=1e-3)
    exact = exact_spinning_tensor(UB, T, 2.5e-6, time=10.0 * T)
    assert np.sqrt((UB**2 * square + exact[0, 0] ** 2) / 1e5) == pytest.approx(25.0, abs=0.5)


STRETCH = np.array([[1.6, 0.3], [0.0, 0.7]])
COMPONENTS = [f"transport_tensor_{row}{column}" for row in "xy" for column in "xy"]


def stretched(members):
    """Velocities and displacements of anisotropic eddies: K becomes L K L^T."""
    u, X = (values[:members] for values in spun(*SETTLED))
    pairs = (np.stack([values.real, values.imag]) for values in (u, X))
    return tuple(STRETCH @ pair for pair in pairs)


def diagnosed(u, X, gradients, **more):
    ensemble = uniform_eddies(box(1, 4, 5), (u[0] + 1j * u[1])[None], (X[0] + 1j * X[1])[None],
                              gradients)  # fmt: skip
    statistics = diagnose(ensemble, DiagnosisSettings(coarsen=1, floor=0.0, **more))
    tensor = np.stack([statistics[name].values for name in COMPONENTS])
    assert np.ptp(tensor, axis=(1, 2, 3)).max() < 1e-3
    return tensor[:, 0, 0, 0].reshape(2, 2), statistics


@pytest.mark.parametrize("degrees", [0.0, 30.0, 137.0])
def test_a_turned_grid_gives_the_turned_tensor_of_the_same_members(degrees):
    # K' = R K R^T; the trace, det S and alpha do not change.
    angle = np.deg2rad(degrees)
    R = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    u, X = stretched(40)
    plain, _ = diagnosed(u, X, GRADIENTS)
    turned, statistics = diagnosed(R @ u, R @ X, GRADIENTS @ R.T)
    np.testing.assert_allclose(turned, R @ plain @ R.T, rtol=1e-7, atol=1e-4)
    assert np.trace(turned) == pytest.approx(np.trace(plain), rel=1e-8)
    alpha = statistics["antisymmetric_tensor"].values
    np.testing.assert_allclose(alpha, 0.5 * (plain[1, 0] - plain[0, 1]), rtol=1e-6)


def test_the_whole_diagnosis_is_right_within_its_jackknife_error():
    members = 200
    Omega, relaxation, _ = SETTLED
    u, X = stretched(members)
    tensor, statistics = diagnosed(u, X, GRADIENTS)
    exact = STRETCH @ exact_spinning_tensor(UB, T, Omega, relaxation=relaxation) @ STRETCH.T
    error = np.array(
        [statistics[f"{name}_standard_error"].values[0, 0, 0] for name in COMPONENTS]
    ).reshape(2, 2)
    square = spread_of_displacement(*SETTLED)
    C, displacement = UB**2 * STRETCH @ STRETCH.T, square * STRETCH @ STRETCH.T
    squares = np.outer(np.diag(C), np.diag(displacement)) + exact**2
    theory = np.sqrt(squares / (members - 1))
    assert (error / theory).mean() == pytest.approx(1.0, abs=0.2)
    assert np.all(np.abs(tensor - exact) < 4.0 * error)


def test_relaxation_is_undone_in_sampled_ensembles_to_their_amplified_error():
    Omega, relaxation, _ = SETTLED
    u, X = stretched(POOL)
    tensor = np.cov(u, X)[:2, 2:]
    relaxed = STRETCH @ exact_spinning_tensor(UB, T, Omega, relaxation=relaxation) @ STRETCH.T
    exact = STRETCH @ exact_spinning_tensor(UB, T, Omega) @ STRETCH.T
    found = without_relaxation(tensor, np.cov(u), 1.0 / relaxation)
    assert found.possible
    bias, error = np.linalg.norm(tensor - exact), np.linalg.norm(tensor - relaxed)
    rest = np.linalg.norm(found.tensor - exact)
    assert bias > 0.35 * np.linalg.norm(exact)
    assert rest < min(1.5 * found.amplification * error, 0.15 * np.linalg.norm(exact))
