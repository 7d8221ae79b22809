"""The memory form: gradients carried by the mean flow and blurred, and tensors on them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diagnosis_cases import box
from learnclosure.diagnosis.memory import MemoryGradient, memory_matrix
from learnclosure.ensemble.grid import Geometry

DAY = 86_400.0
quick = settings(derandomize=True, deadline=None, max_examples=20)


def flow(seed, *, periodic):
    random = np.random.default_rng(seed)
    mask = random.random((2, 7, 9)) < 0.8
    geometry = Geometry(
        random.uniform(20e3, 40e3, (7, 9)), random.uniform(20e3, 40e3, (7, 9)), mask,
        periodic, not periodic,
    )  # fmt: skip
    velocity = 0.5 * random.normal(size=(2, 2, 7, 9))
    return geometry, (velocity[0], velocity[1])


@quick
@given(
    seed=st.integers(0, 99),
    periodic=st.booleans(),
    time=st.floats(0.0, 10 * DAY),
    length=st.floats(0.0, 1e5),
)
def test_a_uniform_gradient_is_remembered_as_it_is(seed, periodic, time, length):
    geometry, velocity = flow(seed, periodic=periodic)
    uniform = np.stack([np.full((2, 7, 9), 2e-6), np.full((2, 7, 9), -1e-6)])
    remembered = MemoryGradient(velocity, geometry, time, length)(uniform)
    np.testing.assert_allclose(remembered, uniform, rtol=1e-9)


@quick
@given(seed=st.integers(0, 99), time=st.floats(0.0, 10 * DAY), length=st.floats(0.0, 1e5))
def test_memory_makes_no_new_extremes(seed, time, length):
    # Monotone matrix: what is remembered lies between what was there.
    geometry, velocity = flow(seed, periodic=True)
    gradient = np.random.default_rng(seed).normal(size=(2, 2, 7, 9))
    remembered = MemoryGradient(velocity, geometry, time, length)(gradient)
    for layer in range(2):
        wet = geometry.mask[layer]
        for part in range(2):
            there = gradient[part, layer][wet]
            assert remembered[part, layer][wet].min() >= there.min() - 1e-9
            assert remembered[part, layer][wet].max() <= there.max() + 1e-9


def test_without_time_and_length_nothing_is_remembered():
    geometry, velocity = flow(3, periodic=True)
    gradient = np.random.default_rng(3).normal(size=(2, 2, 7, 9))
    np.testing.assert_allclose(MemoryGradient(velocity, geometry, 0.0, 0.0)(gradient), gradient)


@pytest.mark.parametrize("axis", [0, 1])
def test_a_wave_in_a_uniform_flow_is_damped_and_lags_as_the_equation_says(axis):
    # exp(ikx) solves (1 + T U d/dx - l^2 d2/dx2) g' = g with g' = g/(1 + ikUT + k^2 l^2);
    # derived in one line, second order on the grid.
    time, length, speed = 3.0 * DAY, 40e3, 0.1
    errors = []
    for cells in (64, 128):
        shape = (4, cells) if axis == 0 else (cells, 4)
        spacing = 960e3 / cells
        grid = box(1, *shape, dx=spacing, dy=spacing, periodic=(True, True))
        place = (np.arange(cells) + 0.5) * spacing
        k = 2.0 * np.pi / 480e3
        wave = np.broadcast_to(
            np.cos(k * place) if axis == 0 else np.cos(k * place)[:, None], (1, *shape)
        )
        still, moving = np.zeros((1, *shape)), np.full((1, *shape), speed)
        velocity = (moving, still) if axis == 0 else (still, moving)
        remembered = MemoryGradient(velocity, grid.geometry, time, length)(np.stack([wave, wave]))
        exact = np.real(np.exp(1j * k * place) / (1 + 1j * k * speed * time + (k * length) ** 2))
        along = remembered[0, 0, 1] if axis == 0 else remembered[0, 0, :, 1]
        errors.append(np.abs(along - exact).max())
    assert errors[0] < 1e-2
    assert errors[0] / errors[1] == pytest.approx(4.0, rel=0.1)


def test_what_happens_upstream_is_felt_downstream_only():
    grid = box(1, 1, 41, dx=10e3, dy=10e3)
    pulse = np.zeros((2, 1, 1, 41))
    pulse[:, 0, 0, 20] = 1.0
    velocity = (np.full((1, 1, 41), 0.5), np.zeros((1, 1, 41)))
    remembered = MemoryGradient(velocity, grid.geometry, 3.0 * DAY, 0.0)(pulse)[0, 0, 0]
    assert np.all(np.abs(remembered[:20]) < 1e-12)
    assert np.all(np.diff(remembered[20:]) < 0.0)


def test_land_and_basins_beyond_it_are_not_remembered():
    mask = np.ones((1, 5, 9), bool)
    mask[:, :, 4] = False
    grid = box(1, 5, 9, mask=mask)
    gradient = np.zeros((2, 1, 5, 9))
    gradient[..., :4] = 1.0
    velocity = (np.full((1, 5, 9), 0.3), np.zeros((1, 5, 9)))
    remembered = MemoryGradient(velocity, grid.geometry, 5.0 * DAY, 50e3)(gradient)
    np.testing.assert_allclose(remembered[..., :4], 1.0, rtol=1e-12)
    np.testing.assert_allclose(remembered[..., 5:], 0.0, atol=1e-12)


def test_the_matrix_is_monotone_where_the_flow_crosses_cells_quickly():
    grid = box(1, 6, 6, dx=30e3, dy=30e3, periodic=(True, True))
    random = np.random.default_rng(0)
    velocity = tuple(2.0 * random.normal(size=(2, 6, 6)))
    matrix = memory_matrix(velocity, grid.geometry, 0, 5.0 * DAY, 10e3).toarray()
    apart = matrix - np.diag(np.diag(matrix))
    assert apart.max() <= 1e-12
    np.testing.assert_allclose(matrix.sum(axis=1), 1.0, rtol=1e-9)
