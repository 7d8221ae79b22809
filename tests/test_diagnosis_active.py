"""GM and Redi coefficients, and whether a passive tensor carries potential vorticity."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from active_cases import accumulated, displaced, noisy_active, sloping_layers, sloping_levels
from diagnosis_cases import GRADIENTS, MemoryEnsemble, box, uniform_eddies
from learnclosure.diagnosis.active import (
    CoefficientEstimator,
    carried_potential_vorticity,
    down_gradient_coefficient,
    verdicts,
)
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.moments import GroupMoments
from learnclosure.diagnosis.surfaces import find_surfaces
from learnclosure.ensemble.grid import gradient
from learnclosure.errors import DiagnosisError
from learnclosure.study import DiagnosisSettings

PLAIN = DiagnosisSettings(coarsen=1)


def coefficients(ensemble):
    moments, estimator = accumulated(ensemble)
    surfaces = find_surfaces(ensemble, estimator.geometry, estimator.area)
    assert surfaces is not None
    return CoefficientEstimator(surfaces, estimator).estimate(moments)


def test_gm_and_potential_vorticity_diffusivities_differ_as_published():
    # Treguier, Held and Larichev 1997, J. Phys. Oceanogr. 27, 567-580 (from memory):
    # k_q = f d_z(k_G s) / (f d_z s - beta). With s = 1e-3 exp(z / 1000 m), f = 1e-4 s-1 and
    # beta = 2e-11 m-1 s-1 the ratio at 0, 500, 1000 and 1500 m is as below.
    edges = np.array([5, -5, -495, -505, -995, -1005, -1495, -1505.0])
    slopes = 1e-3 * np.exp(edges / 1000.0)
    ensemble, diffusivity = sloping_layers(slopes, -np.diff(edges), beta=2e-11)
    found = coefficients(ensemble)
    np.testing.assert_allclose(found.gm_layer, diffusivity, rtol=1e-9)
    moments, estimator = accumulated(ensemble)
    name = "potential_vorticity"
    slope = np.stack(gradient(moments.whole.mean[name], estimator.geometry))
    _, of_vorticity = down_gradient_coefficient(moments.whole.flux[name], slope, estimator.area)
    expected = [1.25, 1.491968, 2.191331, 9.646719]
    np.testing.assert_allclose(of_vorticity[::2] / diffusivity, expected, rtol=1e-4)


def test_without_beta_both_diffusivities_agree():
    # The same relation with beta = 0.
    ensemble, diffusivity = sloping_layers(np.array([0.0, -1e-3, 0.0]), np.array([800.0, 900.0]))
    moments, estimator = accumulated(ensemble)
    slope = np.stack(gradient(moments.whole.mean["potential_vorticity"], estimator.geometry))
    flux = moments.whole.flux["potential_vorticity"]
    cells, layers = down_gradient_coefficient(flux, slope, estimator.area)
    np.testing.assert_allclose(layers, diffusivity, rtol=1e-9)
    np.testing.assert_allclose(cells, diffusivity, rtol=1e-6)


def test_gm_from_buoyancy_on_levels_is_that_of_the_displacement():
    ensemble, diffusivity = sloping_levels(4e-6, 5e-9)
    found = coefficients(ensemble)
    assert found.gm.shape == (5, 6, 8)
    np.testing.assert_allclose(found.gm, diffusivity, rtol=1e-9)
    np.testing.assert_allclose(found.gm_layer, diffusivity, rtol=1e-9)


def test_redi_is_the_scalar_fit_of_passive_tracers_and_the_ratio_compares_the_two():
    ensemble, _ = sloping_layers(np.array([0.0, -1e-3, 0.0]), np.array([800.0, 900.0]))
    moments, _ = accumulated(ensemble)
    found = coefficients(ensemble)
    slopes = GRADIENTS[:4]
    weight = 1.0 / (slopes**2).sum(axis=1)
    flux = np.array([moments.whole.flux[name][:, 0, 2, 3] for name in ensemble.tracers])
    expected = -(weight * (flux * slopes).sum(axis=1)).sum() / len(slopes)
    np.testing.assert_allclose(found.redi, expected, rtol=1e-9)
    np.testing.assert_allclose(found.redi_layer, expected, rtol=1e-9)
    np.testing.assert_allclose(found.ratio_layer, found.redi_layer / found.gm_layer)
    sure = np.isfinite(found.ratio)
    np.testing.assert_allclose(found.ratio[sure], (found.redi / found.gm)[sure])


def test_the_left_out_slope_of_a_periodic_channel_counts():
    ensemble, diffusivity = sloping_layers(np.array([0.0, -1e-3, 0.0]), np.array([800.0, 900.0]))
    anomaly = {
        name: values - np.array([1e-3, -1e-3])[:, None, None] * ensemble.grid.y[:, None]
        for name, values in {"thickness": ensemble.values["thickness"]}.items()
    }
    ensemble.values.update(anomaly)
    upper = ensemble.values["interface_height"][..., :1, :, :]
    ensemble.values["interface_height"][..., :1, :, :] = upper + 1e-3 * ensemble.grid.y[:, None]
    ensemble.left_out_gradients = {
        "interface_height": np.array([[0.0, 0.0], [-1e-3, 0.0]]),
        "thickness": np.array([[0.0, 0.0], [1e-3, -1e-3]]),
    }
    np.testing.assert_allclose(coefficients(ensemble).gm_layer, diffusivity, rtol=1e-9)


def test_the_error_of_a_layer_value_is_the_jackknife_of_whole_ensembles_without_a_member():
    ensemble = noisy_active(members=5, times=2)
    found = coefficients(ensemble)
    left_out = []
    for member in range(5):
        rest = noisy_active(members=5, times=2)
        rest.values = {k: np.delete(v, member, axis=1) for k, v in rest.values.items()}
        left_out.append(coefficients(rest).gm_layer)
    departure = np.array(left_out) - np.mean(left_out, axis=0)
    expected = np.sqrt(4 / 5 * (departure**2).sum(axis=0))
    np.testing.assert_allclose(found.gm_layer_error, expected, rtol=1e-9)


def test_a_cell_whose_mean_slope_is_noise_has_no_coefficient_of_its_own():
    grid = box(2, 8, 10, periodic=(True, True))
    ensemble = noisy_active(members=6, times=2)
    assert ensemble.grid.shape == grid.shape
    random = np.random.default_rng(3)
    noise = random.normal(size=ensemble.values["thickness"].shape)
    ensemble.values["interface_height"] = noise
    ensemble.values["thickness"] = -noise
    found = coefficients(ensemble)
    assert np.isnan(found.gm).mean() > 0.5
    assert np.isfinite(found.gm_error[np.isfinite(found.gm)]).all()
    assert np.isfinite(found.gm_layer).all()
    assert np.isnan(found.ratio).mean() > 0.8


def two_layer_members(seed: int = 0) -> tuple[dict[str, np.ndarray], dict[str, float]]:
    """Band-limited two-layer quasi-geostrophic members, differentiated exactly."""
    random = np.random.default_rng(seed)
    rows, columns, spacing = 32, 48, 20e3
    constants = {"f": 1e-4, "g": 0.02, "H1": 1000.0, "H2": 3000.0}
    k = 2 * np.pi * np.fft.fftfreq(columns, spacing)[None, :]
    l = 2 * np.pi * np.fft.fftfreq(rows, spacing)[:, None]  # noqa: E741
    low = (np.abs(k) < np.abs(k).max() / 4) & (np.abs(l) < np.abs(l).max() / 4)

    def back(spectrum):
        return np.fft.ifft2(spectrum).real

    noise = np.fft.fft2(random.normal(size=(1, 5, 2, rows, columns)))
    psi = np.where(low, noise, 0.0) * 2e4
    psi[..., 1, :, :] += 0.6 * psi[..., 0, :, :] * np.exp(1j * k * 1e5)
    apart = psi[..., 0, :, :] - psi[..., 1, :, :]
    F1, F2 = (constants["f"] ** 2 / constants["g"] / constants[name] for name in ("H1", "H2"))
    stretching = np.stack([-F1 * apart, F2 * apart], axis=-3)
    deeper = constants["f"] / constants["g"] * apart
    values = {
        "x_velocity": back(-1j * l * psi),
        "y_velocity": back(1j * k * psi),
        "potential_vorticity": back(-(k**2 + l**2) * psi + stretching),
        "thickness": back(np.stack([deeper, -deeper], axis=-3)),
    }
    values["thickness"] += np.array([1000.0, 3000.0])[:, None, None]
    for number, (along_x, along_y) in enumerate(GRADIENTS[:2]):
        values[f"dye_{number}"] = along_x * values["x_velocity"] + along_y * values["y_velocity"]
    return values, constants


def test_two_layer_fluxes_keep_the_exact_relations_of_quasi_geostrophy():
    # Taylor 1915, Phil. Trans. A 215, 1-26, and Bretherton 1966, Q. J. R. Meteorol. Soc. 92,
    # 325-334 (from memory): in the zonal mean <v q> = -d_y <u v> - (f/H) <v h>, and thickness
    # fluxes of both layers cancel.
    values, c = two_layer_members()
    grid = box(2, 32, 48, dx=20e3, dy=20e3, periodic=(True, True))
    ensemble = MemoryEnsemble(
        grid, values, ("dye_0", "dye_1"), active=("potential_vorticity", "thickness")
    )
    moments, _ = accumulated(ensemble)
    whole = moments.whole
    of_thickness = whole.flux["thickness"][1].mean(axis=-1)
    np.testing.assert_allclose(of_thickness[0], -of_thickness[1], rtol=1e-9, atol=1e-12)
    stress = whole.covariance["x_velocity", "y_velocity"].mean(axis=-1)
    l = 2 * np.pi * np.fft.fftfreq(32, 20e3)  # noqa: E741
    convergence = -np.fft.ifft(1j * l * np.fft.fft(stress, axis=-1), axis=-1).real
    depths = np.array([c["H1"], c["H2"]])[:, None]
    expected = convergence - c["f"] / depths * of_thickness
    found = whole.flux["potential_vorticity"][1].mean(axis=-1)
    np.testing.assert_allclose(found, expected, atol=1e-9 * np.abs(expected).max())
    column = (depths * found).sum(axis=0)
    np.testing.assert_allclose(
        column, (depths * convergence).sum(axis=0), atol=1e-9 * np.abs(depths * found).max()
    )


def test_a_passive_tensor_carries_a_flux_it_was_made_from():
    grid = box(1, 10, 12, periodic=(True, False))
    ensemble = uniform_eddies(grid, *displaced(), GRADIENTS)
    bend = np.sin(grid.y / 4e4)[:, None] * np.ones(grid.shape)
    moments, estimator = accumulated(ensemble)
    tensor = estimator.group(moments.whole).smooth.tensor
    slope = np.stack(gradient(1e-5 * bend, grid.geometry))
    exact = -np.einsum("lyxab,blyx->alyx", tensor, slope)

    def score(flux):
        group = GroupMoments(
            {"potential_vorticity": 1e-5 * bend}, {"potential_vorticity": flux},
            moments.whole.eddy_kinetic_energy, {},
        )  # fmt: skip
        changed = replace(moments, whole=group, halves=(group, group))
        return carried_potential_vorticity(changed, estimator, tensor, np.zeros((2, 1)))

    carried, against = score(exact), score(-exact)
    np.testing.assert_allclose(carried.flux_skill, 1.0)
    np.testing.assert_allclose(carried.divergence_skill, 1.0)
    assert carried.flux_verdicts == carried.divergence_verdicts == ("carries",)
    assert against.flux_verdicts == against.divergence_verdicts == ("does not carry",)


def test_verdicts_say_what_the_threshold_and_the_reliability_allow():
    skill = np.array([0.5, 0.49, 0.49, np.nan])
    reliability = np.array([np.nan, np.nan, 0.4, 0.9])
    assert verdicts(skill, reliability) == (
        "carries", "does not carry", "cannot be told", "cannot be told",
    )  # fmt: skip


@pytest.mark.parametrize("name", ["thickness", "potential_vorticity"])
def test_a_field_that_is_the_same_in_all_members_is_refused(name):
    ensemble = noisy_active(members=4, times=1)
    ensemble.values[name] = np.full_like(ensemble.values[name], 1000.1)
    with pytest.raises(DiagnosisError, match=f"'{name}' is the same in all members"):
        diagnose(ensemble, PLAIN)
