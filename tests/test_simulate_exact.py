"""The exactly solvable ensembles have the tensors theory gives them."""

from __future__ import annotations

import h5netcdf
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose

from learnclosure.errors import InputError
from learnclosure.simulate.exact import (
    GRADIENTS,
    exact_plane_wave_tensor,
    exact_spinning_tensor,
    simulate_plane_wave,
    simulate_spinning,
)
from simulate_cases import read_members

DAY = 86400.0

# Taylor's integral of ub^2 exp(-s/T) R(Omega s); the infinite-time values follow from
# S = ub^2 T / (1 + (Omega T)^2), alpha = Omega T S by hand, those at finite time were
# confirmed by a Monte Carlo run of 1e5 members outside this package.
SPINNING = [
    ((0.1, 2e5, 2.5e-6, 0.0, np.inf), 1600.0, 800.0),
    ((0.1, 2e5, 2.5e-6, 0.0, 10 * 2e5), 1599.94, 800.06),
    ((0.1, 2e5, -2.5e-6, 0.0, 10 * 2e5), 1599.94, -800.06),
    ((0.1, 2e5, 1e-5, 0.0, 10 * 2e5), 400.03, 799.97),
    ((0.1, 2e5, 2.5e-6, 0.0, 2e5), 1224.55, 259.53),
    ((0.1, 2e5, 2.5e-6, 5e-6, 20 * 2e5), 941.18, 235.29),
    ((0.1, 1e5, 1e-5, 0.0, np.inf), 500.0, 500.0),
]


@pytest.mark.parametrize(("parameters", "symmetric", "alpha"), SPINNING)
def test_spinning_tensor_has_the_tabled_values(parameters, symmetric, alpha):
    ub, T, Omega, relaxation, time = parameters
    tensor = exact_spinning_tensor(ub, T, Omega, relaxation=relaxation, time=time)
    assert_allclose(tensor, [[symmetric, -alpha], [alpha, symmetric]], atol=0.005)


@settings(derandomize=True, max_examples=25, deadline=None)
@given(
    T=st.floats(1e4, 1e6), Omega=st.floats(-1e-5, 1e-5), relaxation=st.floats(0, 1e-5),
    time=st.floats(1e4, 1e7),
)  # fmt: skip
def test_relaxation_only_shortens_the_memory_and_a_mirror_only_turns_alpha(
    T, Omega, relaxation, time
):
    tensor = exact_spinning_tensor(0.1, T, Omega, relaxation=relaxation, time=time)
    shorter = 1.0 / (1.0 / T + relaxation)
    assert_allclose(tensor, exact_spinning_tensor(0.1, shorter, Omega, time=time), rtol=1e-12)
    mirrored = exact_spinning_tensor(0.1, T, -Omega, relaxation=relaxation, time=time)
    assert_allclose(mirrored, tensor.T, rtol=1e-12)


def test_plane_wave_tensor_has_the_tabled_values():
    # Plumb 1979, J. Atmos. Sci. 36 (from memory); numbers worked out by hand.
    frequency = 2 * np.pi / (20 * DAY)
    tensor = exact_plane_wave_tensor(0.1, 0.05, frequency, relaxation=1 / (50 * DAY))
    assert_allclose(tensor, [[87.1881, 684.7741], [-684.7741, 21.7970]], atol=5e-5)
    tensor = exact_plane_wave_tensor(0.1, 0.05, frequency)
    assert_allclose(tensor, [[0.0, 687.5494], [-687.5494, 0.0]], atol=5e-5)


def eddy_fluxes(members, tracer):
    """Unbiased flux of a tracer, shape (2, time, layer), at one cell."""
    cell = (..., 3, 4)
    anomaly = members[tracer][cell] - members[tracer][cell].mean(0)
    flow = np.stack([members["x_velocity"][cell], members["y_velocity"][cell]])
    flow = flow - flow.mean(1, keepdims=True)
    return (flow * anomaly).sum(1) / (len(anomaly) - 1)


def test_plane_wave_files_carry_the_exact_tensor_at_every_time(tmp_path):
    folder = simulate_plane_wave(tmp_path / "wave", members=5, snapshots=3)
    members = read_members(folder)
    assert abs(members["x_velocity"].mean(0)).max() < 1e-16
    for layer, period in enumerate((20 * DAY, 30 * DAY)):
        tensor = exact_plane_wave_tensor(0.1, 0.05, 2 * np.pi / period, relaxation=1 / (50 * DAY))
        for number, gradient in enumerate(GRADIENTS, start=1):
            flux = eddy_fluxes(members, f"tracer_{number}")[:, :, layer]
            expected = -tensor @ gradient * 5 / 4  # N / (N - 1): the estimate is unbiased
            assert_allclose(flux, np.repeat(expected[:, None], 3, axis=1), rtol=1e-11)


@pytest.mark.parametrize(
    ("T", "Omega", "relaxation", "days"),
    [(2e5, 2.5e-6, 5e-6, 30.0), (1e5, 1e-5, 5e-6, 30.0), (2e5, -2.5e-6, 0.0, 2e5 / DAY)],
)
def test_spinning_files_carry_the_tensor_within_sampling_error(
    tmp_path, T, Omega, relaxation, days
):
    # Layers are independent of each other, so that 100 alike make a sample of 900 from ten files.
    count, layers = 10, 100
    folder = simulate_spinning(
        tmp_path / "spin", members=count, snapshots=1, spinup_days=days, ub=[0.1] * layers, T=T,
        Omega=Omega, relaxation=relaxation,
    )  # fmt: skip
    members = read_members(folder)
    tensor = exact_spinning_tensor(0.1, T, Omega, relaxation=relaxation, time=days * DAY)
    for number, gradient in enumerate(GRADIENTS, start=1):
        flux = eddy_fluxes(members, f"tracer_{number}")[:, 0].mean(1)
        expected = -tensor @ np.array(gradient)
        variance = members[f"tracer_{number}"][:, 0, :, 3, 4].var(0, ddof=1).mean()
        # Standard error of a covariance of jointly Gaussian variables.
        error = np.sqrt((0.1**2 * variance + expected**2) / ((count - 1) * layers))
        assert (abs(flux - expected) < 4 * error).all()
        assert (abs(expected) > 6 * error).any()


def test_mean_gradients_are_those_asked_for(tmp_path):
    folder = simulate_spinning(tmp_path / "spin", members=2, snapshots=1, spinup_days=1.0)
    members = read_members(folder)
    for number, gradient in enumerate(GRADIENTS, start=1):
        mean = members[f"tracer_{number}"].mean(0)[0, 0]
        assert_allclose(np.diff(mean, axis=1) / 15.0e3, gradient[0], rtol=1e-9, atol=1e-18)
        assert_allclose(np.diff(mean, axis=0) / 15.0e3, gradient[1], rtol=1e-9, atol=1e-18)


def test_exact_ensembles_are_not_periodic_and_mark_withheld_tracers(tmp_path):
    folder = simulate_plane_wave(tmp_path / "wave", members=3, snapshots=1)
    with h5netcdf.File(folder / "member_02.nc", "r") as file:
        assert file.attrs["periodic"] == ""
        assert file.variables["withheld_1"].attrs["tracer_role"] == "withheld"
        assert file.variables["realization"][...] == 2


def test_two_phases_cannot_make_a_plane_wave_ensemble(tmp_path):
    with pytest.raises(InputError, match=r"members cannot be this few \(found 2, .* at least 3"):
        simulate_plane_wave(tmp_path / "wave", members=2)
    assert not (tmp_path / "wave").exists()


def test_parameters_of_different_numbers_of_layers_are_refused(tmp_path):
    with pytest.raises(InputError, match="different numbers of layers"):
        simulate_spinning(tmp_path / "spin", T=(1e5, 2e5), Omega=(0.0, 0.0, 0.0))
    with pytest.raises(InputError, match="spinning ensemble: T: must be positive"):
        simulate_spinning(tmp_path / "spin", T=-1.0)
