"""Bounds of predicted tensors: exact, nearest, and smooth where eigenvalues coincide."""

from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from learnclosure.closures.constraints import bounded_tensor

FLOOR, CAP = 50.0, 5.0e4
component = st.floats(-1e6, 1e6)


def eigen_clip(nn: float, tt: float, nt: float) -> np.ndarray:
    """Clip eigenvalues by a general eigen-solver: an independent route to the same tensor."""
    values, vectors = np.linalg.eigh(np.array([[nn, nt], [nt, tt]]))
    return (vectors * np.clip(values, FLOOR, CAP)) @ vectors.T


@settings(derandomize=True, max_examples=200, deadline=None)
@given(component, component, component, component)
def test_agrees_with_a_general_eigen_solver(nn: float, tt: float, nt: float, alpha: float) -> None:
    got = bounded_tensor(np, np.float64(nn), np.float64(tt), np.float64(nt), alpha, FLOOR, CAP)
    expected = eigen_clip(nn, tt, nt)
    np.testing.assert_allclose(
        [got[0], got[1], got[2]],
        [expected[0, 0], expected[1, 1], expected[0, 1]],
        atol=1e-9 * CAP,
    )


@settings(derandomize=True, max_examples=200, deadline=None)
@given(component, component, component, component)
def test_result_lies_within_bounds(nn: float, tt: float, nt: float, alpha: float) -> None:
    a, b, c, d = bounded_tensor(
        np, np.float64(nn), np.float64(tt), np.float64(nt), np.float64(alpha), FLOOR, CAP
    )
    low, high = np.linalg.eigvalsh(np.array([[a, c], [c, b]]))
    assert low >= FLOOR - 1e-9
    assert high <= CAP * (1.0 + 1e-14)
    assert low > 0.0
    assert abs(d) <= CAP


@settings(derandomize=True, max_examples=100, deadline=None)
@given(component, component, component, component)
def test_bounding_twice_changes_nothing(nn: float, tt: float, nt: float, alpha: float) -> None:
    first = bounded_tensor(np, *(np.float64(v) for v in (nn, tt, nt, alpha)), FLOOR, CAP)
    second = bounded_tensor(np, *first, FLOOR, CAP)
    np.testing.assert_allclose(second, first, rtol=1e-12, atol=1e-9)


@settings(derandomize=True, max_examples=100, deadline=None)
@given(component, component, component, st.floats(0.0, math.pi))
def test_bounding_commutes_with_rotation(nn: float, tt: float, nt: float, angle: float) -> None:
    rotation = np.array([[math.cos(angle), -math.sin(angle)], [math.sin(angle), math.cos(angle)]])

    def bounded(s: np.ndarray) -> np.ndarray:
        a, b, c, _ = bounded_tensor(np, s[0, 0], s[1, 1], s[0, 1], 0.0, FLOOR, CAP)
        return np.array([[a, c], [c, b]])

    s = np.array([[nn, nt], [nt, tt]])
    np.testing.assert_allclose(
        bounded(rotation @ s @ rotation.T), rotation @ bounded(s) @ rotation.T, atol=1e-8 * CAP
    )


@pytest.mark.parametrize("value", [-1e5, 0.0, 700.0, 1e7])
def test_equal_eigenvalues_stay_isotropic(value: float) -> None:
    got = bounded_tensor(np, np.float64(value), np.float64(value), np.float64(0.0), 0.0, FLOOR, CAP)
    assert got == (np.clip(value, FLOOR, CAP), np.clip(value, FLOOR, CAP), 0.0, 0.0)


def test_nearly_equal_eigenvalues_vary_smoothly() -> None:
    gap = np.array([0.0, 5e-324, 1e-200, 1e-160, 1e-30, 1e-12, 1e-6])
    nn, tt, nt, _ = bounded_tensor(np, 700.0 + gap, 700.0 - gap, 0.3 * gap, 0.0 * gap, FLOOR, CAP)
    np.testing.assert_allclose(nn, 700.0, atol=2e-6)
    np.testing.assert_allclose(tt, 700.0, atol=2e-6)
    np.testing.assert_allclose(nt, 0.3 * gap, atol=1e-12)
