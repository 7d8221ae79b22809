"""The bias that relaxing tracers brings to a tensor is taken away exactly where it is known."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from learnclosure.diagnosis.relaxation import without_relaxation
from learnclosure.simulate.exact import exact_plane_wave_tensor, exact_spinning_tensor

DAY = 86400.0
quick = settings(derandomize=True, deadline=None, max_examples=40)


# Taylor 1922, Proc. London Math. Soc. 20, 196-212; Borgas, Flesch and Sawford 1997, J. Fluid
# Mech. 332, 141-171 (from memory; the integral takes two lines).
@quick
@given(
    T=st.floats(1e4, 1e6), Omega=st.floats(-2e-5, 2e-5), days=st.floats(0.5, 1000.0),
    ub=st.floats(1e-3, 1.0),
)  # fmt: skip
def test_spinning_eddies_get_back_the_tensor_of_tracers_that_do_not_relax(T, Omega, days, ub):
    relaxed = exact_spinning_tensor(ub, T, Omega, relaxation=1.0 / (days * DAY))
    found = without_relaxation(relaxed, ub**2 * np.eye(2), days * DAY)
    exact = exact_spinning_tensor(ub, T, Omega)
    assert found.possible
    size = np.linalg.norm(exact)
    np.testing.assert_allclose(found.tensor, exact, atol=1e-12 * size * found.amplification)


def test_the_tabled_bias_of_two_fifths_is_taken_away():
    relaxed = np.array([[941.18, -235.29], [235.29, 941.18]])
    found = without_relaxation(relaxed, 0.01 * np.eye(2), 2e5)
    np.testing.assert_allclose(found.tensor, [[1600.0, -800.0], [800.0, 1600.0]], atol=0.02)
    # w = 1/T - i Omega against 1/T + lambda - i Omega: errors grow by their ratio squared.
    ratio = abs((1e-5 - 2.5e-6j) / (5e-6 - 2.5e-6j)) ** 2
    np.testing.assert_allclose(found.amplification, ratio, rtol=1e-4)


# Plumb 1979, J. Atmos. Sci. 36, 1699-1704 (from memory): a wave turns without fading.
def test_a_plane_wave_keeps_only_its_antisymmetric_part():
    frequency = 2.0 * np.pi / (20 * DAY)
    relaxed = exact_plane_wave_tensor(0.1, 0.05, frequency, relaxation=1.0 / (50 * DAY))
    np.testing.assert_allclose(relaxed, [[87.1881, 684.7741], [-684.7741, 21.7970]], atol=1e-4)
    found = without_relaxation(relaxed, np.diag([0.005, 0.00125]), 50 * DAY)
    assert found.possible
    np.testing.assert_allclose(found.tensor, [[0.0, 687.5494], [-687.5494, 0.0]], atol=1e-4)


def fading_flow(seed):
    """Draw W with eigenvalues in the right half-plane and a covariance, both anisotropic."""
    random = np.random.default_rng(seed)
    half = random.normal(size=(2, 2))
    C = 1e-2 * (half @ half.T + 0.1 * np.eye(2))
    W = 1e-5 * (random.normal(size=(2, 2)) + 2.5 * np.eye(2))
    return (C, W) if np.linalg.eigvals(W).real.min() > 1e-6 else fading_flow(seed + 1000)


@quick
@given(seed=st.integers(0, 999), days=st.floats(1.0, 300.0))
def test_anisotropic_memories_are_corrected_whatever_their_order(seed, days):
    C, W = fading_flow(seed)
    rate = 1.0 / (days * DAY)
    relaxed, exact = np.linalg.inv(W + rate * np.eye(2)) @ C, np.linalg.inv(W) @ C
    found = without_relaxation(relaxed, C, days * DAY)
    assert found.possible
    np.testing.assert_allclose(found.tensor, exact, rtol=1e-8, atol=1e-9 * np.abs(exact).max())
    V = np.linalg.inv(relaxed) @ C
    other = C @ np.linalg.inv(V - rate * np.eye(2))
    np.testing.assert_allclose(found.tensor, other, rtol=1e-8, atol=1e-9 * np.abs(exact).max())


def test_the_integral_of_the_autocovariance_is_what_is_corrected():
    # K(lambda) summed numerically from exp(-W s) C, with no formula for its value.
    C, W = fading_flow(3)
    roots, vectors = np.linalg.eig(W)
    s = np.linspace(0.0, 30.0 / roots.real.min(), 200_001)
    memory = (vectors * np.exp(-s[:, None, None] * roots)) @ np.linalg.inv(vectors) @ C
    rate = 1.0 / (20 * DAY)
    relaxed = np.trapezoid(np.real(memory) * np.exp(-rate * s)[:, None, None], s, axis=0)
    exact = np.trapezoid(np.real(memory), s, axis=0)
    assert np.linalg.norm(relaxed - exact) > 0.02 * np.linalg.norm(exact)
    found = without_relaxation(relaxed, C, 20 * DAY)
    np.testing.assert_allclose(found.tensor, exact, rtol=1e-4, atol=1e-5 * np.abs(exact).max())


@quick
@given(seed=st.integers(0, 999), angle=st.floats(-3.0, 3.0))
def test_turned_axes_give_the_turned_correction(seed, angle):
    C, W = fading_flow(seed)
    relaxed = np.linalg.inv(W + 5e-6 * np.eye(2)) @ C
    R = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
    plain = without_relaxation(relaxed, C, 2e5).tensor
    turned = without_relaxation(R @ relaxed @ R.T, R @ C @ R.T, 2e5).tensor
    np.testing.assert_allclose(turned, R @ plain @ R.T, atol=1e-8 * np.abs(plain).max())


@quick
@given(seed=st.integers(0, 999))
def test_small_errors_grow_by_no_more_than_the_amplification(seed):
    C, W = fading_flow(seed)
    relaxed = np.linalg.inv(W + 5e-6 * np.eye(2)) @ C
    error = 1e-6 * np.linalg.norm(relaxed) * np.random.default_rng(seed).normal(size=(2, 2))
    found = without_relaxation(relaxed, C, 2e5)
    moved = without_relaxation(relaxed + error, C, 2e5).tensor - found.tensor
    assert np.linalg.norm(moved) < 1.01 * found.amplification * np.linalg.norm(error)


def test_no_correction_where_no_fading_memory_explains_the_tensor():
    C = 0.01 * np.eye(2)
    tensors = np.array([
        2500.0 * np.eye(2),  # a memory longer than the relaxation allows: ub^2/lambda is 2000
        [[-500.0, 0.0], [0.0, 800.0]],
        [[np.nan, 0.0], [0.0, 800.0]],
        np.zeros((2, 2)),
        1000.0 * np.eye(2),
    ])  # fmt: skip
    found = without_relaxation(tensors, np.broadcast_to(C, tensors.shape), 2e5)
    assert found.possible.tolist() == [False, False, False, False, True]
    assert np.isnan(found.tensor[:4]).all()
    assert np.isnan(found.amplification[:4]).all()
    np.testing.assert_allclose(found.tensor[4], 2000.0 * np.eye(2), rtol=1e-12)
    still = without_relaxation(tensors, np.zeros_like(tensors), 2e5)
    assert not still.possible.any()


def test_slower_relaxation_needs_less_correction_and_none_none():
    tensor = np.array([[900.0, -300.0], [200.0, 700.0]])
    C = np.diag([0.02, 0.01])
    moved = [
        np.linalg.norm(without_relaxation(tensor, C, days * DAY).tensor - tensor)
        for days in (20.0, 60.0, 200.0, 1e6)
    ]
    assert moved == sorted(moved, reverse=True)
    assert moved[-1] < 1e-3 * moved[0]


def test_a_relaxation_time_that_is_no_time_is_refused():
    with pytest.raises(ValueError, match=r"relaxation time of -5\.0 s"):
        without_relaxation(np.eye(2), np.eye(2), -5.0)
