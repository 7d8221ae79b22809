"""Smooth diffusivities fitted to the divergence of a flux, on a flux known exactly."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import nnls
from scipy.sparse import csc_matrix

from diagnosis_cases import box
from learnclosure.diagnosis import diffusivities
from learnclosure.diagnosis.diffusivities import (
    FluxAndGradient,
    diffusive_divergence,
    divergence_operator,
    smooth_diffusivity,
)
from learnclosure.diagnosis.knots import interpolation
from learnclosure.diagnosis.nonnegative import minimise_nonnegative
from learnclosure.ensemble.grid import divergence, gradient

ROWS, COLUMNS = 20, 28


def basin():
    mask = np.ones((1, ROWS, COLUMNS), bool)
    mask[0, 3:7, 10:14] = False
    return box(1, ROWS, COLUMNS, dx=30e3, dy=30e3, mask=mask, periodic=(True, False))


def truth(grid):
    """Return a diffusivity that varies, and a gradient across and along the channel."""
    x, y = np.meshgrid(grid.x / grid.x[-1], grid.y / grid.y[-1])
    diffusivity = 2500.0 * np.exp(-(((y - 0.5) / 0.25) ** 2)) * (1 + 0.5 * np.sin(2 * np.pi * x))
    field = 1e-5 * (np.tanh(2 * (y - 0.5)) + 0.2 * np.sin(4 * np.pi * x) * np.cos(2 * y))
    return (diffusivity + 100.0)[None], np.stack(gradient(field[None], grid.geometry))


def rotational(grid, size):
    """Return a flux along contours of a stream function: it has no divergence."""
    random = np.random.default_rng(2)
    k = np.fft.rfftfreq(COLUMNS)[None, :] ** 2 + np.fft.fftfreq(ROWS)[:, None] ** 2
    spectrum = np.fft.rfft2(random.normal(size=(ROWS, COLUMNS))) * np.exp(-k / 0.1**2)
    stream = np.where(grid.geometry.mask[0], np.fft.irfft2(spectrum, s=(ROWS, COLUMNS)), 0.0)
    stream[[0, -1]] = 0.0
    along_x, along_y = gradient(stream[None], grid.geometry)
    flux = np.stack([-along_y, along_x])
    return size * flux / flux.std()


def halves(grid, noise, size=0.0):
    """Two independent samples of the flux and their mean."""
    diffusivity, slope = truth(grid)
    exact = -diffusivity * slope
    extra = rotational(grid, size * exact.std()) if size else 0.0
    samples = []
    for seed in (1, 2):
        random = np.random.default_rng(seed).normal(size=exact.shape)
        samples.append(FluxAndGradient(exact + extra + noise * exact.std() * random, slope))
    whole = FluxAndGradient(0.5 * (samples[0].flux + samples[1].flux), slope)
    return whole, samples


def fitted(grid, noise, size=0.0):
    return smooth_diffusivity(
        grid.geometry, grid.geometry.area * grid.geometry.mask, *halves(grid, noise, size)
    )


@pytest.mark.parametrize("periodic", [(True, False), (False, True), (True, True)])
def test_the_operator_is_the_divergence_everything_else_uses(periodic):
    mask = np.random.default_rng(0).random((2, 9, 11)) < 0.8
    grid = box(2, 9, 11, mask=mask, periodic=periodic)
    flux = np.random.default_rng(1).normal(size=(2, 2, 9, 11))
    expected = divergence(flux[0], flux[1], grid.geometry)
    for layer in range(2):
        operator = divergence_operator(grid.geometry, layer)
        inside = np.where(mask[layer], flux[:, layer], 0.0)
        found = sum(part @ one.ravel() for part, one in zip(operator, inside, strict=True))
        np.testing.assert_allclose(found.reshape(9, 11), expected[layer], atol=1e-18)


@pytest.mark.parametrize("seed", range(6))
def test_the_bounded_solution_is_that_of_an_independent_solver(seed):
    random = np.random.default_rng(seed)
    factor = random.normal(size=(30, 20))
    goal = random.normal(size=30)
    found = minimise_nonnegative(csc_matrix(factor.T @ factor), factor.T @ goal)
    np.testing.assert_allclose(found, nnls(factor, goal)[0], atol=1e-10)
    assert (found == 0.0).any()
    again = minimise_nonnegative(csc_matrix(factor.T @ factor), factor.T @ goal, found > 0.0)
    np.testing.assert_allclose(again, found, atol=1e-12)


def test_a_clean_divergence_is_explained_by_a_diffusivity_that_varies_and_not_by_a_constant():
    grid = basin()
    found = fitted(grid, 0.0)
    assert found.skill[0] > 0.97
    assert found.cross_half_skill[0] == pytest.approx(found.skill[0])
    assert found.constant_skill[0] < 0.6
    wet = grid.geometry.mask
    assert (found.diffusivity[wet] >= 0.0).all()
    assert np.isnan(found.diffusivity[~wet]).all()


def test_reported_scores_are_those_of_the_reported_diffusivity():
    grid = basin()
    whole, samples = halves(grid, 0.2, 0.5)
    found = fitted(grid, 0.2, 0.5)
    wet = grid.geometry.mask
    area = (grid.geometry.area * wet)[wet]

    def score(guess, flux):
        true = divergence(flux[0], flux[1], grid.geometry)[wet]
        mean = np.average(true, weights=area)
        return 1 - (area * (guess[wet] - true) ** 2).sum() / (area * (true - mean) ** 2).sum()

    guess = diffusive_divergence(found.diffusivity, whole.gradient, grid.geometry)
    assert found.skill[0] == pytest.approx(score(guess, whole.flux), rel=1e-9)
    constant = diffusive_divergence(
        np.full(wet.shape, found.constant[0]), whole.gradient, grid.geometry
    )
    assert found.constant_skill[0] == pytest.approx(score(constant, whole.flux), rel=1e-9)
    better = [
        score(
            diffusive_divergence(
                np.full(wet.shape, factor * found.constant[0]), whole.gradient, grid.geometry
            ),
            whole.flux,
        )
        for factor in (0.98, 1.02)
    ]
    assert max(better) < found.constant_skill[0]
    assert len(samples) == 2


def test_a_fit_to_the_raw_flux_misleads_where_the_flux_is_mostly_rotational():
    found = fitted(basin(), 0.05, 2.0)
    assert found.cross_half_skill[0] > found.constant_cross_half_skill[0] + 0.2
    assert found.raw_flux_cross_half_skill[0] < found.cross_half_skill[0] - 0.2


def test_light_smoothing_overfits_and_the_cross_half_score_tells(monkeypatch):
    grid = basin()
    chosen = fitted(grid, 0.4)
    monkeypatch.setattr(diffusivities, "LONGEST", 2.0**-6)
    monkeypatch.setattr(diffusivities, "HALVINGS", 0)
    light = fitted(grid, 0.4)
    assert light.length[0] < chosen.length[0]
    assert light.skill[0] > chosen.skill[0] + 0.05
    assert light.cross_half_skill[0] < chosen.cross_half_skill[0] - 0.05
    error, light_error = (
        np.nanstd(one.diffusivity - np.where(grid.geometry.mask, truth(grid)[0], np.nan))
        for one in (chosen, light)
    )
    assert light_error > error


def test_a_flux_up_the_gradient_gets_no_negative_diffusivity():
    grid = basin()
    whole, samples = halves(grid, 0.1)
    backwards = [FluxAndGradient(-one.flux, one.gradient) for one in (whole, *samples)]
    found = smooth_diffusivity(
        grid.geometry, grid.geometry.area * grid.geometry.mask, backwards[0], backwards[1:]
    )
    assert found.constant[0] == 0.0
    assert np.nanmin(found.diffusivity) == 0.0
    assert found.skill[0] < 0.3


def test_a_layer_without_any_gradient_has_no_diffusivity():
    grid = basin()
    nothing = FluxAndGradient(
        np.random.default_rng(0).normal(size=(2, *grid.shape)), np.zeros((2, *grid.shape))
    )
    area = grid.geometry.area * grid.geometry.mask
    found = smooth_diffusivity(grid.geometry, area, nothing, [nothing, nothing])
    assert np.isnan(found.diffusivity).all()
    assert np.isnan(found.skill).all()


@pytest.mark.parametrize(("count", "factor"), [(12, 3), (13, 4), (7, 1), (5, 9)])
def test_knots_reproduce_straight_lines_between_them_and_never_change_a_sign(count, factor):
    for periodic in (False, True):
        weights = interpolation(count, factor, periodic).toarray()
        assert weights.shape == (count, -(-count // factor))
        assert (weights >= 0.0).all()
        np.testing.assert_allclose(weights.sum(axis=1), 1.0)
    starts = np.arange(0, count, factor)
    centres = starts + 0.5 * (np.minimum(factor, count - starts) - 1)
    cells = np.arange(count)
    between = (cells >= centres[0]) & (cells <= centres[-1])
    straight = interpolation(count, factor, False) @ centres
    np.testing.assert_allclose(straight[between], cells[between])


def test_on_a_periodic_axis_knots_join_both_ends():
    weights = interpolation(8, 2, True).toarray()
    np.testing.assert_allclose(weights[0], [0.75, 0, 0, 0.25])
    np.testing.assert_allclose(weights[7], [0.25, 0, 0, 0.75])


def test_fewer_knots_than_cells_change_a_smooth_fit_little(monkeypatch):
    grid = basin()
    monkeypatch.setattr(diffusivities, "LONGEST", 0.25)
    monkeypatch.setattr(diffusivities, "HALVINGS", 0)
    few = fitted(grid, 0.2)
    monkeypatch.setattr(diffusivities, "KNOTS_PER_LENGTH", 1e9)
    all_cells = fitted(grid, 0.2)
    assert few.length == all_cells.length
    assert few.skill[0] == pytest.approx(all_cells.skill[0], abs=0.02)
    wet = grid.geometry.mask
    gap = np.sqrt(np.mean((few.diffusivity - all_cells.diffusivity)[wet] ** 2))
    assert gap < 0.1 * np.std(all_cells.diffusivity[wet])
