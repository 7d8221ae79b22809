"""Solvers that agree, and errors that are known told by the error budget."""

from __future__ import annotations

import numpy as np
import pytest

from diagnosis_cases import box, random_ensemble
from learnclosure.diagnosis.budget import error_budget, jackknife_calibration, smoothing_check
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.estimate import Estimator
from learnclosure.diagnosis.gauge import HelmholtzSolver
from learnclosure.diagnosis.inversion import SmoothInversion
from learnclosure.diagnosis.memory import MemoryGradient
from learnclosure.diagnosis.moments import GroupMoments
from learnclosure.diagnosis.quality import cautions
from learnclosure.diagnosis.tensor import least_squares_tensor, normal_equations
from learnclosure.errors import DiagnosisError
from learnclosure.study import DiagnosisSettings

TENSOR = np.array([[2000.0, -600.0], [300.0, 900.0]])


def slopes(rows, columns, *, tracers=6, seed=0):
    """Gradients that turn slowly over the domain, shape (tracer, 2, 1, y, x)."""
    random = np.random.default_rng(seed)
    y, x = np.mgrid[0:rows, 0:columns]
    phase = random.uniform(0.0, 2.0 * np.pi, (tracers, 2, 1, 1, 1))
    wave = random.uniform(0.05, 0.2, (tracers, 2, 1, 1, 1))
    return 1e-6 * (np.sin(wave * (x + y) + phase) + 0.5 * np.cos(wave * (x - 2 * y)))


def estimator(grid, names=("a", "b", "c", "d", "e", "f"), **options):
    settings = DiagnosisSettings(**options)
    geometry = grid.geometry
    area = np.where(geometry.mask, geometry.area, 0.0)
    still = (np.zeros(grid.shape), np.zeros(grid.shape))
    inversion = SmoothInversion(geometry, area, settings, len(names))
    return Estimator(
        geometry,
        area,
        inversion,
        tuple(names),
        MemoryGradient(still, geometry, 0.0, 0.0),
        HelmholtzSolver(geometry),
    )


def estimate(tool, gradient, flux):
    """Estimate from gradients given instead of mean tracers."""
    names = tool.tracers
    tool.gradients = lambda _mean: dict(zip(names, gradient, strict=True))
    moments = GroupMoments(
        mean=dict.fromkeys(names, np.zeros(gradient.shape[2:])),
        flux=dict(zip(names, flux, strict=True)),
        eddy_kinetic_energy=np.zeros(gradient.shape[2:]),
    )
    return tool.group(moments)


@pytest.mark.parametrize("floor_method", ["admm", "projection"])
def test_factorising_and_iterating_find_the_same_tensors(floor_method):
    mask = np.ones((1, 40, 50), bool)
    mask[:, 10:20, 5:30] = False
    grid = box(1, 40, 50, mask=mask, periodic=(True, False))
    random = np.random.default_rng(4)
    gradient = slopes(40, 50)
    flux = -np.einsum("ab,kblyx->kalyx", TENSOR, gradient)
    flux = flux + 3e-3 * random.normal(size=flux.shape)
    area = np.where(mask, grid.geometry.area, 0.0)
    equations = normal_equations(flux, gradient, area)
    found = [
        SmoothInversion(
            grid.geometry,
            area,
            DiagnosisSettings(solver=solver, floor_method=floor_method, floor=500.0),
            6,
        ).fit(equations)
        for solver in ("direct", "iterative")
    ]
    assert found[0].floored.any()
    apart = np.abs(found[0].tensor - found[1].tensor).max()
    assert apart < 1e-8 * np.abs(found[0].tensor).max()


def test_smoothing_takes_from_a_wavy_tensor_what_the_budget_says():
    # Known truth: a tensor that varies as a wave; twicing finds the bias to second order.
    grid = box(1, 24, 48, dx=30e3, dy=30e3, periodic=(True, True))
    wave = 1.0 + 0.5 * np.sin(2.0 * np.pi * np.arange(48) / 12.0) * np.ones((1, 24, 1))
    gradient = slopes(24, 48)
    flux = -np.einsum("lyx,ab,kblyx->kalyx", wave, TENSOR, gradient)
    tool = estimator(grid, floor=0.0)
    whole = estimate(tool, gradient, flux)
    truth = wave[..., None, None] * TENSOR
    bias = whole.smooth.tensor - truth
    told = error_budget(tool, whole, ()).smoothing
    size = np.sqrt(np.mean(bias[..., 0, 0] ** 2))
    assert size > 50.0
    assert np.sqrt(np.mean((told - bias)[..., 0, 0] ** 2)) < 0.4 * size


def test_noise_in_the_gradients_weakens_the_tensor_as_the_budget_says():
    # Errors in variables (Fuller 1987): regression on noisy gradients is low by N M^-1.
    grid = box(1, 40, 60, dx=30e3, dy=30e3)
    random = np.random.default_rng(1)
    gradient = slopes(40, 60)
    flux = -np.einsum("ab,kblyx->kalyx", TENSOR, gradient)
    noise = 0.45e-6 * random.normal(size=(2, *gradient.shape))
    tool = estimator(grid, floor=0.0)
    whole = estimate(tool, gradient + noise.mean(axis=0), flux)
    halves = tuple(estimate(tool, gradient + part, flux) for part in noise)
    budget = error_budget(tool, whole, halves)
    bias = (whole.smooth.tensor - TENSOR)[..., 0, 0].mean()
    assert bias < -0.1 * TENSOR[0, 0]
    assert budget.attenuation[..., 0, 0].mean() == pytest.approx(bias, rel=0.25)
    variance = (gradient**2).sum(axis=1)
    weight = whole.equations.weights[:, 0][:, None, None, None]
    known = np.mean((weight * 0.5 * 0.45e-6**2 * 2.0).sum(axis=0) * np.ones_like(variance[0]))
    total = np.mean(np.trace(whole.equations.M, axis1=-2, axis2=-1))
    assert np.average(
        budget.noise_share, weights=np.trace(whole.equations.M, axis1=-2, axis2=-1)
    ) == pytest.approx(known / total, rel=0.1)


def test_without_halves_nothing_is_said_of_noisy_gradients():
    grid = box(1, 8, 10)
    gradient = slopes(8, 10)
    tool = estimator(grid)
    whole = estimate(tool, gradient, -np.einsum("ab,kblyx->kalyx", TENSOR, gradient))
    budget = error_budget(tool, whole, ())
    assert budget.attenuation is None
    assert budget.noise_share is None
    np.testing.assert_allclose(budget.smoothing, 0.0, atol=1e-6)
    np.testing.assert_allclose(budget.misfit, 0.0, atol=1e-6)


def test_the_misfit_error_is_that_of_textbook_regression():
    # Covariance of the coefficients s^2 (G^T G)^-1 (Draper and Smith, Applied Regression
    # Analysis; from memory): Monte Carlo over fluxes with noise of equal relative size.
    grid = box(1, 30, 40)
    random = np.random.default_rng(2)
    gradient = slopes(30, 40)
    area = grid.geometry.area[None]
    weights = normal_equations(gradient, gradient, area).weights
    noise = random.normal(size=gradient.shape) / np.sqrt(weights[:, None, :, None, None])
    flux = -np.einsum("ab,kblyx->kalyx", TENSOR, gradient) + 300.0 * noise
    tool = estimator(grid, smoothing_length=0.0, floor=0.0)
    whole = estimate(tool, gradient, flux)
    error = error_budget(tool, whole, ()).misfit
    ratio = (least_squares_tensor(whole.equations) - TENSOR) / error
    good = np.isfinite(ratio)
    assert good.all(axis=(-1, -2)).mean() > 0.9
    # Student's t with 4 degrees of freedom: 90 % lie within 2.132 (standard tables).
    assert np.mean(np.abs(ratio[good]) < 2.132) == pytest.approx(0.9, abs=0.03)


def test_halves_that_differ_as_the_jackknife_says_are_calibrated():
    grid = box(1, 30, 40)
    random = np.random.default_rng(3)
    gradient = slopes(30, 40)
    flux = -np.einsum("ab,kblyx->kalyx", TENSOR, gradient)
    tool = estimator(grid, floor=0.0)
    error = np.full((1, 30, 40, 2, 2), 100.0)
    whole = estimate(tool, gradient, flux)
    halves = []
    for _ in range(2):
        half = estimate(tool, gradient, flux)
        # Each half has twice the variance of the whole.
        half.smooth.tensor[:] += np.sqrt(2.0) * 100.0 * random.normal(size=error.shape)
        halves.append(half)
    weights = np.ones((1, 30, 40))
    np.testing.assert_allclose(jackknife_calibration(tuple(halves), error, weights), 1.0, atol=0.07)
    np.testing.assert_allclose(
        jackknife_calibration(tuple(halves), 2.0 * error, weights), 0.5, atol=0.04
    )
    assert np.isnan(jackknife_calibration(tuple(halves), error, 0.0 * weights)).all()
    assert np.isfinite(whole.smooth.tensor).all()


def test_a_length_that_blurs_the_truth_scores_worse_on_withheld_tracers():
    grid = box(1, 24, 48, dx=30e3, dy=30e3, periodic=(True, True))
    wave = 1.0 + 0.8 * np.sin(2.0 * np.pi * np.arange(48) / 12.0) * np.ones((1, 24, 1))
    gradient = slopes(24, 48, tracers=7)
    flux = -np.einsum("lyx,ab,kblyx->kalyx", wave, TENSOR, gradient)
    tool = estimator(grid, floor=0.0, smoothing_length=60e3)
    whole = estimate(tool, gradient[:6], flux[:6])
    whole.flux["kept"], whole.acted_on["kept"] = flux[6], gradient[6]
    scores = smoothing_check(tool, whole, ("kept",), np.ones((1, 24, 48), bool))
    assert scores.shape == (3, 1)
    assert scores[0, 0] > scores[1, 0] > scores[2, 0]


def test_the_artefact_names_every_error_and_says_where_it_is_weak():
    ensemble = random_ensemble(box(2, 8, 10), members=6, times=3, withheld=1)
    statistics = diagnose(ensemble, DiagnosisSettings(coarsen=2))
    sources = list(statistics["error_source_name"].values)
    assert sources == ["sampling", "smoothing", "gradient noise", "misfit"]
    for name in ("xx", "xy", "yx", "yy"):
        assert np.isfinite(statistics[f"error_budget_{name}"].values).all()
        assert f"transport_tensor_{name}_smoothing_bias" in statistics
    assert statistics["smoothing_check"].dims == ("smoothing_length", "layer")
    assert statistics.attrs["cautions"] == "; ".join(cautions(statistics))


def test_cautions_name_what_is_weak_and_only_that():
    statistics = diagnose(
        random_ensemble(box(2, 8, 10), members=6, times=3, withheld=1), DiagnosisSettings(coarsen=2)
    )
    fine = statistics.copy(deep=True)
    fine["condition_number"][:] = 2.0
    fine["leverage_dye_e"][:] = 0.5
    fine["negative_share"][:] = 0.0
    fine["half_amplitude_ratio"][:] = 0.99
    assert cautions(fine) == []
    for name, value, word in (
        ("condition_number", 30.0, "condition number above 5 in 100%"),
        ("leverage_dye_e", 2.0, "leverage of dye_e exceeds 1 in 100%"),
        ("negative_share", 0.2, "negative eigenvalues in 20% of layer 1"),
        ("half_amplitude_ratio", 0.8, "half of the members give only 80%"),
    ):
        weak = fine.copy(deep=True)
        weak[name][:] = value
        assert word in "; ".join(cautions(weak))


def test_the_memory_form_is_named_in_the_artefact_and_scored_beside_the_local_one():
    ensemble = random_ensemble(box(2, 8, 10), members=6, times=2, withheld=1)
    local = diagnose(ensemble, DiagnosisSettings(coarsen=2))
    memory = diagnose(ensemble, DiagnosisSettings(coarsen=2, form="memory"))
    assert (local.attrs["tensor_form"], memory.attrs["tensor_form"]) == ("local", "memory")
    for kind in ("flux", "divergence"):
        np.testing.assert_array_equal(
            local[f"memory_withheld_{kind}_skill"], memory[f"withheld_{kind}_skill"]
        )
        np.testing.assert_array_equal(
            memory[f"local_withheld_{kind}_skill"], local[f"withheld_{kind}_skill"]
        )


def test_the_leverage_of_a_tracer_that_is_not_there_is_refused():
    ensemble = random_ensemble(box(2, 8, 10), members=4, times=2, withheld=1)
    with pytest.raises(
        DiagnosisError, match=r"leverage_tracers: there is no such tracer .found salt"
    ):
        diagnose(ensemble, DiagnosisSettings(leverage_tracers=("salt",)))
    named = diagnose(ensemble, DiagnosisSettings(leverage_tracers=ensemble.tracers[:1]))
    assert f"leverage_{ensemble.tracers[0]}" in named
