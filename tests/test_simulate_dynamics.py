"""The channel solves the quasi-geostrophic equations it claims to solve."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.testing import assert_allclose

from learnclosure.errors import InputError, SimulationError
from learnclosure.simulate.regimes import DEMO_REGIMES, HELD_OUT
from learnclosure.simulate.targets import CHANNEL_WAVES, target_fields
from simulate_cases import small_regime, started

RADIUS = 30.0e3
BETA = 1.6e-11
CRITICAL = 2 * BETA * RADIUS**2  # Phillips: equal depths, 0.0288 m/s


def uniform_shear(shear: float, wavelength: float, **changes):
    """Describe a channel without jet, ridge or damping that holds one wave of its noise band."""
    quiet = {
        "jet_speed": 0.0, "ridge_height": 0.0, "drag_days": np.inf, "relaxation_days": np.inf,
        "tracer_relaxation_days": np.inf, "noise_speed": 1e-6, "beta": BETA,
        "deformation_radius": RADIUS, "background_speed": shear, "upper_thickness": 2000.0,
        "lower_thickness": 2000.0, "columns": 32, "rows": 8, "spacing": wavelength / 32,
    }  # fmt: skip
    return small_regime(**{**quiet, **changes})


def growth_rate(regime, first_day: int, days: int) -> float:
    """Growth rate of the wave's amplitude, s-1."""
    channel = started(regime, members=1, days=first_day)
    before = np.sqrt(np.mean(channel.corner_streamfunction.astype(float) ** 2))
    channel.advance(days * regime.steps_per_day)
    after = np.sqrt(np.mean(channel.corner_streamfunction.astype(float) ** 2))
    return float(np.log(after / before) / (days * 86400.0))


@pytest.mark.parametrize(
    ("factor", "scaled_wavenumber", "rate"), [(4.0, 0.676, 7.53977e-7), (2.0, 0.734, 3.21991e-7)]
)
def test_most_unstable_wave_grows_as_phillips_found(factor, scaled_wavenumber, rate):
    # Phillips 1954, Tellus 6, 273-286 (from memory); numbers from the eigenvalue problem.
    regime = uniform_shear(factor * CRITICAL, 2 * np.pi * RADIUS / scaled_wavenumber)
    assert growth_rate(regime, 150, 30) == pytest.approx(rate, rel=0.02)


def test_unequal_layers_grow_as_the_eigenvalue_problem_says():
    wavenumber, shear = 2 * np.pi / 300e3, 0.16
    regime = uniform_shear(
        shear, 300e3, upper_thickness=1000.0, lower_thickness=3000.0, deformation_radius=35e3
    )
    upper, lower = 0.75 / 35e3**2, 0.25 / 35e3**2
    # q = B psi and c q = (U q + Q psi): the phase speeds are the eigenvalues below.
    stretch = np.array([[-(wavenumber**2) - upper, upper], [lower, -(wavenumber**2) - lower]])
    gradients = np.diag([BETA + upper * shear, BETA - lower * shear])
    speeds = np.linalg.eigvals(np.linalg.inv(stretch) @ (np.diag([shear, 0]) @ stretch + gradients))
    expected = wavenumber * speeds.imag.max()
    assert expected > 1e-7
    assert growth_rate(regime, 60, 20) == pytest.approx(expected, rel=0.02)


def test_shear_below_phillips_limit_does_not_grow():
    regime = uniform_shear(0.8 * CRITICAL, 2 * np.pi * RADIUS / 0.8409)
    channel = started(regime, members=1)
    sizes = []
    for _ in range(40):
        channel.advance(10 * regime.steps_per_day)
        sizes.append(np.abs(channel.corner_streamfunction).max())
    # Two neutral waves beat against each other but stay bounded.
    assert max(sizes[20:]) < 1.02 * max(sizes[:20])


def test_face_velocities_have_no_divergence():
    west, south = started(small_regime(), days=20).face_velocities()
    divergence = np.roll(west, -1, -1) - west + np.roll(south, -1, -2) - south
    assert np.abs(divergence).max() < 1e-14 * np.abs(west).max() * 10


def test_a_uniform_tracer_stays_uniform():
    channel = started(small_regime(tracer_relaxation_days=np.inf), days=20)
    channel.release_tracers(np.ones((1, 16, 24)))
    channel.advance(5 * 24)
    assert_allclose(channel.tracers, 1.0, atol=2e-5)


def test_tracer_content_is_kept_and_variance_never_grows_without_sources():
    regime = small_regime(tracer_relaxation_days=np.inf)
    channel = started(regime, days=20)
    channel.release_tracers(2.0 + target_fields(regime))
    content = channel.tracers.astype(float).sum((-2, -1))
    variances = []
    for _ in range(8):
        channel.advance(regime.steps_per_day)
        variances.append(channel.tracers.astype(float).var((-2, -1)))
    # Single precision keeps about seven digits over 192 steps.
    assert_allclose(channel.tracers.astype(float).sum((-2, -1)), content, rtol=2e-6)
    assert (np.diff(variances, axis=0) < 0).all()


def test_a_tracer_at_rest_decays_to_its_target_in_the_relaxation_time():
    regime = small_regime(jet_speed=0.0, background_speed=1e-9, noise_speed=0.0)
    channel = started(regime)
    channel.release_tracers(target_fields(regime))
    channel.tracers[...] = 0.0
    channel.advance(30 * regime.steps_per_day)
    expected = (1 - np.exp(-30 / 60)) * target_fields(regime)
    assert_allclose(channel.tracers[0, 0], expected, atol=2e-3)


def test_inversion_recovers_the_jet():
    regime = small_regime(noise_speed=0.0, ridge_height=500.0)
    u, v = started(regime, members=1).centre_velocities()
    y = (np.arange(16) + 0.5) * 20e3 - 160e3
    # The grid has two cells in a jet width, so centre values are smoothed by a few percent.
    assert_allclose(u[0, 0], np.repeat((0.4 * np.exp(-((y / 80e3) ** 2)) + 0.02)[:, None], 24, 1),
                    atol=0.03)  # fmt: skip
    assert np.abs(u[0, 1]).max() < 1e-6
    assert np.abs(v).max() < 1e-6


def test_too_fast_a_flow_is_refused_by_name_day_and_number():
    channel = started(small_regime(time_step=43200.0))
    with pytest.raises(
        SimulationError,
        match=r"^sedge: day 0: .* too fast .* = [01]\.\d+, expected at most 0\.4\); "
        r"use a time step shorter than 43200 s",
    ):
        channel.check()


def test_a_blown_up_flow_is_refused():
    channel = started(small_regime(time_step=43200.0, jet_speed=3.0), days=40)
    with pytest.raises(SimulationError, match=r"^sedge: day 40: the simulated flow blew up"):
        channel.check()


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"time_step": 5000.0}, "sedge: time_step: .* whole number of steps in 86400 s"),
        ({"rows": 15}, "sedge: columns, rows: .* even numbers"),
        ({"deformation_radius": -1.0}, "sedge: deformation_radius: .* finite positive number"),
        ({"jet_speed": np.nan}, "sedge: jet_speed: .*found nan"),
    ],
)
def test_parameters_the_scheme_cannot_represent_are_refused(changes, message):
    with pytest.raises(InputError, match=message):
        small_regime(**changes)


def test_held_out_regime_lies_inside_the_span_of_the_others():
    held_out = next(regime for regime in DEMO_REGIMES if regime.name == HELD_OUT)
    others = [regime for regime in DEMO_REGIMES if regime is not held_out]
    assert len(others) == 3
    for name in ("deformation_radius", "jet_speed", "jet_width", "beta", "ridge_height",
                 "drag_days"):  # fmt: skip
        values = [getattr(regime, name) for regime in others]
        assert min(values) < getattr(held_out, name) < max(values)


def test_two_targets_are_withheld_and_all_differ():
    assert [wave.withheld for wave in CHANNEL_WAVES].count(True) == 2
    fields = target_fields(small_regime()).reshape(len(CHANNEL_WAVES), -1)
    assert np.linalg.matrix_rank(fields) == len(CHANNEL_WAVES)
