"""What the inversion makes of nearly parallel gradients and of a pull: bounds known exactly."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diagnosis_cases import box, uniform_eddies
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.inversion import SmoothInversion
from learnclosure.diagnosis.tensor import (
    condition_number,
    least_squares_tensor,
    normal_equations,
    scalar_diffusivity,
    symmetric_parts,
)
from learnclosure.errors import DiagnosisError
from learnclosure.study import DiagnosisSettings

quick = settings(derandomize=True, deadline=None, max_examples=40)
ONE = np.ones((1, 1, 1))
SPINNING = np.array([[1600.0, -800.0], [800.0, 1600.0]])


def everywhere(vectors):
    return np.asarray(vectors)[..., None, None, None] * ONE


def at_an_angle(degrees):
    """Two gradients of equal length, as columns."""
    angle = np.deg2rad(degrees)
    return 1e-6 * np.array([[1.0, np.cos(angle)], [0.0, np.sin(angle)]])


def inverted(fluxes, gradients):
    """Tensor from fluxes and gradients in columns."""
    equations = normal_equations(everywhere(fluxes.T), everywhere(gradients.T), ONE)
    return least_squares_tensor(equations)[0, 0, 0], condition_number(equations.M)[0, 0, 0]


# Two unit gradients at an angle: cond = cot(angle/2), and a relative error of the flux grows by
# no more than that (Golub and Van Loan, Matrix Computations, 2.7).
@quick
@given(degrees=st.floats(2.5, 90.0), seed=st.integers(0, 999))
def test_relative_errors_grow_by_no_more_than_the_condition_number(degrees, seed):
    random = np.random.default_rng(seed)
    gradients, tensor = at_an_angle(degrees), random.normal(size=(2, 2))
    fluxes, error = -tensor @ gradients, 1e-9 * random.normal(size=(2, 2))
    found, condition = inverted(fluxes + error, gradients)
    assert condition == pytest.approx(1.0 / np.tan(0.5 * np.deg2rad(degrees)), rel=1e-9)
    growth = np.linalg.norm(found - tensor) / np.linalg.norm(tensor)
    assert growth <= 1.0001 * condition * np.linalg.norm(error) / np.linalg.norm(fluxes)


@pytest.mark.parametrize("degrees", [2.5, 5.0, 30.0, 60.0, 90.0])
def test_the_bound_is_reached_by_a_tensor_along_the_well_known_direction(degrees):
    gradients = at_an_angle(degrees)
    strong, weak = np.linalg.svd(gradients)[0].T
    right = np.linalg.svd(gradients)[2]
    tensor = 1000.0 * np.outer([0.6, 0.8], strong)
    fluxes = -tensor @ gradients
    error = 1e-3 * np.linalg.norm(fluxes) * np.outer([0.8, -0.6], right[1])
    found, condition = inverted(fluxes + error, gradients)
    assert np.linalg.norm(found - tensor) / 1000.0 == pytest.approx(1e-3 * condition, rel=1e-6)
    # The error stands where the gradients say little, and nowhere else.
    assert np.linalg.norm((found - tensor) @ strong) < 1e-8 * np.linalg.norm(
        (found - tensor) @ weak
    )


@pytest.mark.parametrize(("degrees", "condition"), [(1.0, 114.589), (2.0, 57.290)])
def test_gradients_closer_than_the_limit_have_no_tensor_of_their_own(degrees, condition):
    gradients = at_an_angle(degrees)
    found, worth = inverted(-SPINNING @ gradients, gradients)
    assert worth == pytest.approx(condition, rel=1e-5)
    assert np.isnan(found).all()
    random = np.random.default_rng(1)
    u = random.normal(size=(1, 6)) + 1j * random.normal(size=(1, 6))
    ensemble = uniform_eddies(box(), u, u, np.vstack([gradients.T, 2.0 * gradients.T[:1]]))
    with pytest.raises(DiagnosisError, match="parallel or vanish everywhere"):
        diagnose(ensemble, DiagnosisSettings(coarsen=1))


@pytest.mark.parametrize("degrees", [3.0, 10.0, 45.0, 90.0])
def test_members_of_two_exact_tracers_give_the_same_tensor_at_any_angle(degrees):
    # Exact tracers carry no error for parallel gradients to amplify.
    random = np.random.default_rng(2)
    u, X = (random.normal(size=(1, 8, 2)) @ np.array([1.0, 1j]) * size for size in (0.1, 1e4))
    slopes = [np.vstack([at_an_angle(angle).T, [[0.0, 1e-6]]]) for angle in (degrees, 90.0)]
    chosen = DiagnosisSettings(coarsen=1, floor=0.0, floor_method="projection", scalar_pull=0.0)
    found, upright = (diagnose(uniform_eddies(box(), u, X, pair), chosen) for pair in slopes)
    for row in "xy":
        for column in "xy":
            name = f"least_squares_tensor_{row}{column}"
            np.testing.assert_allclose(found[name], upright[name], rtol=1e-6, atol=1e-4)
    expected = 1.0 / np.tan(0.5 * np.deg2rad(degrees))
    np.testing.assert_allclose(found["condition_number"], expected, rtol=1e-6)


def pulled(tensor, gradients, pull):
    """Tensor of the smooth inversion without neighbours or floor, and its equations."""
    grid = box(1, 3, 4)
    spread = np.ones(grid.shape)
    fluxes = -tensor @ gradients
    equations = normal_equations(
        fluxes.T[..., None, None, None] * spread, gradients.T[..., None, None, None] * spread,
        grid.geometry.area * spread,
    )  # fmt: skip
    options = DiagnosisSettings(smoothing_length=0.0, floor=0.0, scalar_pull=pull)
    fit = SmoothInversion(grid.geometry, grid.geometry.area * spread, options, gradients.shape[1])
    return fit.fit(equations).tensor[0, 1, 1], equations


# Backus and Gilbert 1968, Geophys. J. R. Astron. Soc. 16, 169-205, for the averaging kernel:
# a regularised K is K P, with P = M (M + a^2)^-1, plus the pull's target times (1 - P).
def test_the_averaging_kernel_shrinks_each_direction_by_its_own_factor():
    gradients = 1e-6 * np.array([[1.0, 0.0, 1.0], [0.0, 1.0, 1.0]])
    G = gradients @ gradients.T
    kernel = G @ np.linalg.inv(G + 1e-14 * np.eye(2))
    along = np.array([1.0, 1.0]) / np.sqrt(2.0), np.array([1.0, -1.0]) / np.sqrt(2.0)
    for direction, factor in zip(along, (0.996678, 0.990099), strict=True):
        np.testing.assert_allclose(kernel @ direction, factor * direction, atol=5e-7)
    # Tracers that count alike: eigenvalues 2 and 1 of M, a^2 = pull <tr M>/2.
    for pull in (0.0, 0.02, 0.5):
        found, equations = pulled(SPINNING, gradients, pull)
        M, scalar = equations.M[0, 1, 1], scalar_diffusivity(equations)[0, 1, 1]
        np.testing.assert_allclose(np.linalg.eigvalsh(M), [1.0, 2.0], rtol=1e-12)
        P = M @ np.linalg.inv(M + pull * 1.5 * np.eye(2))
        for direction, root in zip(along, (2.0, 1.0), strict=True):
            np.testing.assert_allclose(P @ direction, root / (root + 1.5 * pull) * direction)
        expected = SPINNING @ P + scalar * (np.eye(2) - P)
        np.testing.assert_allclose(found, expected, rtol=1e-9, atol=1e-9 * 1600.0)


def test_a_pull_mixes_symmetric_and_antisymmetric_parts_unless_gradients_are_balanced():
    uneven = 1e-6 * np.array([[1.0, 0.0, 1.0], [0.0, 1.0, 1.0]])
    even = 1e-6 * np.array([[1.0, 0.0, 1.0, 1.0], [0.0, 1.0, 1.0, -1.0]])
    S_xx, S_xy, S_yy, alpha = symmetric_parts(pulled(SPINNING, even, 0.5)[0])
    assert (S_xx, S_yy) == (pytest.approx(1600.0), pytest.approx(1600.0))
    assert abs(S_xy) < 1e-6
    assert alpha == pytest.approx(800.0 / 1.5)
    S_xx, S_xy, S_yy, alpha = symmetric_parts(pulled(SPINNING, uneven, 0.5)[0])
    assert max(abs(S_xx - S_yy), abs(S_xy)) > 50.0
    assert alpha < 800.0
