"""The smooth inversion: what it must return exactly, its floor, and what it minimises."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diagnosis_cases import box
from learnclosure.diagnosis.inversion import SmoothInversion
from learnclosure.diagnosis.systems import smoothness_operator
from learnclosure.diagnosis.tensor import (
    NormalEquations,
    least_squares_tensor,
    normal_equations,
    scalar_diffusivity,
    symmetric_parts,
    with_floor,
)
from learnclosure.ensemble.grid import Geometry
from learnclosure.study import DiagnosisSettings

quick = settings(derandomize=True, deadline=None, max_examples=25)


def case(seed, *, rows=6, columns=7, tracers=4, tensor=None, share=0.8):
    """Make normal equations of random gradients and fluxes on unequal cells with land."""
    random = np.random.default_rng(seed)
    geometry = Geometry(
        dx=random.uniform(20e3, 40e3, (rows, columns)),
        dy=random.uniform(10e3, 30e3, (rows, columns)),
        mask=random.random((2, rows, columns)) < share,
        periodic_x=bool(seed % 2),
        periodic_y=bool(seed % 3),
    )
    shape = (tracers, 2, *geometry.mask.shape)
    slope = 1e-6 * random.normal(size=shape)
    if tensor is None:
        flux = 1e-3 * random.normal(size=shape)
    else:
        flux = -np.einsum("ab,kblyx->kalyx", tensor, slope)
    area = np.where(geometry.mask, geometry.area, 0.0)
    return geometry, area, normal_equations(flux, slope, area)


def fitted(geometry, area, equations, tracers=4, **options):
    return SmoothInversion(geometry, area, DiagnosisSettings(**options), tracers).fit(equations)


def least_squares_is_finite(equations):
    return np.isfinite(least_squares_tensor(equations)).all(axis=(-2, -1))


def lowest_eigenvalue(tensor):
    symmetric = 0.5 * (tensor + np.swapaxes(tensor, -1, -2))
    return np.linalg.eigvalsh(symmetric)[..., 0]


def misfit(tensor, geometry, area, equations, length, layer):
    """Sum what the fit minimises cell by cell and neighbour by neighbour."""
    M, K = equations.M[layer], tensor[layer]
    plain = equations.B[layer] @ np.linalg.inv(M)
    apart = K - plain
    total = float((area[layer] * np.einsum("yxab,yxbc,yxac->yx", apart, M, apart)).sum())
    wet, (rows, columns) = geometry.mask[layer], geometry.dx.shape
    mean = 0.5 * (area[layer] * np.trace(M, axis1=-2, axis2=-1)).sum() / area[layer].sum()
    for row in range(rows):
        for column in range(columns):
            for down, right, periodic in ((1, 0, geometry.periodic_y), (0, 1, geometry.periodic_x)):
                r, c = row + down, column + right
                if not periodic and (r == rows or c == columns):
                    continue
                r, c = r % rows, c % columns
                if not (wet[row, column] and wet[r, c]):
                    continue
                along, across = (geometry.dy, geometry.dx) if down else (geometry.dx, geometry.dy)
                weight = (across[row, column] + across[r, c]) / (along[row, column] + along[r, c])
                difference = ((K[row, column] - K[r, c]) ** 2).sum()
                total += length**2 * mean * weight * float(difference)
    return total


@quick
@given(seed=st.integers(0, 999), length=st.floats(0.0, 1e6))
def test_a_constant_tensor_comes_back_whatever_the_smoothing(seed, length):
    tensor = np.array([[1600.0, -900.0], [700.0, 1100.0]])
    geometry, area, equations = case(seed, tensor=tensor)
    fit = fitted(geometry, area, equations, smoothing_length=length)
    # Cells alone with nearly parallel gradients lose digits; with neighbours none do.
    known = geometry.mask & ((length > 10e3) | least_squares_is_finite(equations))
    np.testing.assert_allclose(fit.tensor[known] - tensor, 0.0, atol=1e-10 * 1600.0)
    assert not fit.floored.any()


@quick
@given(
    seed=st.integers(0, 999),
    floor=st.floats(0.0, 1e3),
    method=st.sampled_from(["admm", "projection"]),
)
def test_the_floor_is_respected_everywhere(seed, floor, method):
    geometry, area, equations = case(seed)
    fit = fitted(geometry, area, equations, floor=floor, floor_method=method)
    low = lowest_eigenvalue(fit.tensor[geometry.mask])
    assert np.all(low >= floor - 1e-11 * np.abs(fit.tensor).max())
    assert np.all(fit.tensor[~geometry.mask] == 0.0)


@pytest.mark.parametrize("seed", [0, 1, 2])
def test_the_fit_minimises_what_it_says(seed):
    length = 20e3
    geometry, area, equations = case(seed)
    free = fitted(geometry, area, equations, smoothing_length=length, floor=0.0, tracers=4)
    bounded = fitted(geometry, area, equations, smoothing_length=length, floor=400.0)
    after = fitted(
        geometry, area, equations, smoothing_length=length, floor=400.0, floor_method="projection"
    )
    random = np.random.default_rng(seed)
    for layer in range(2):
        score = [
            misfit(fit.tensor, geometry, area, equations, length, layer)
            for fit in (free, bounded, after)
        ]
        assert score[0] <= score[1] <= score[2]
        for size in (1.0, 30.0, 300.0):
            step = size * random.normal(size=bounded.tensor.shape)
            nearby = with_floor(bounded.tensor + step, 400.0)
            other = misfit(nearby, geometry, area, equations, length, layer)
            assert other > score[1] * (1.0 - 1e-3)


@pytest.mark.parametrize("seed", [3, 4])
def test_the_fit_without_a_binding_floor_is_the_dense_minimum(seed):
    # One large least-squares problem, written out and solved by LAPACK.
    length, big = 25e3, np.diag([1e4, 1e4])
    geometry, area, noise = case(seed)
    equations = NormalEquations(noise.M, noise.B + big @ noise.M, noise.weights)
    fit = fitted(geometry, area, equations, smoothing_length=length, floor=0.0)
    layer = 1
    wet = np.flatnonzero(geometry.mask[layer])
    M = equations.M[layer].reshape(-1, 2, 2)[wet]
    B = equations.B[layer].reshape(-1, 2, 2)[wet]
    weight = area[layer].ravel()[wet]
    mean = 0.5 * (weight * np.trace(M, axis1=-2, axis2=-1)).sum() / weight.sum()
    smooth = smoothness_operator(geometry, layer).toarray()[np.ix_(wet, wet)]
    roots, axes = np.linalg.eigh(smooth)
    rows = np.sqrt(np.maximum(roots, 0.0) * mean) * length * axes
    count = len(wet)
    for row in range(2):
        design = np.zeros((4 * count, 2 * count))
        target = np.zeros(4 * count)
        for cell in range(count):
            factor = np.linalg.cholesky(M[cell]) * np.sqrt(weight[cell])
            place = [cell, count + cell]
            design[np.ix_(place, place)] = factor.T
            target[place] = factor.T @ np.linalg.solve(M[cell], B[cell, row])
        design[2 * count : 3 * count, :count] = rows.T
        design[3 * count :, count:] = rows.T
        exact = np.linalg.lstsq(design, target, rcond=None)[0].reshape(2, count).T
        found = fit.tensor[layer].reshape(-1, 2, 2)[wet, row]
        np.testing.assert_allclose(found, exact, rtol=1e-7, atol=1e-5)


def test_without_smoothing_every_cell_is_alone():
    geometry, area, equations = case(2)
    big = np.diag([1e4, 1e4])
    equations = NormalEquations(equations.M, equations.B + big @ equations.M, equations.weights)
    fit = fitted(geometry, area, equations, smoothing_length=0.0, floor=0.0)
    plain = least_squares_tensor(equations)
    wet = geometry.mask & np.isfinite(plain).all(axis=(-2, -1))
    wet &= lowest_eigenvalue(np.nan_to_num(plain)) > 0.0
    assert wet.sum() > 40
    np.testing.assert_allclose(fit.tensor[wet], plain[wet], rtol=1e-6, atol=1e-4)


def test_land_never_reaches_the_fit():
    geometry, area, equations = case(5)
    quiet = fitted(geometry, area, equations).tensor
    M, B = equations.M.copy(), equations.B.copy()
    M[~geometry.mask], B[~geometry.mask] = 1e12, -1e15
    loud = fitted(geometry, area, NormalEquations(M, B, equations.weights)).tensor
    np.testing.assert_array_equal(quiet, loud)


def test_a_strait_of_land_keeps_two_basins_apart():
    grid = box(1, 4, 9, mask=np.arange(9)[None, None, :] * np.ones((1, 4, 1)) != 4.0)
    area = np.where(grid.geometry.mask, grid.geometry.area, 0.0)
    slope = np.random.default_rng(1).normal(size=(4, 2, *grid.shape))
    west = np.arange(9) < 4
    flux = -np.where(west, 3000.0, 500.0) * slope
    equations = normal_equations(flux, slope, area)
    fit = fitted(grid.geometry, area, equations, smoothing_length=1e6)
    np.testing.assert_allclose(fit.tensor[0, :, :4, 0, 0], 3000.0, rtol=1e-8)
    np.testing.assert_allclose(fit.tensor[0, :, 5:, 0, 0], 500.0, rtol=1e-8)


@pytest.mark.parametrize("turns", [1, 2, 3])
def test_turning_the_grid_turns_the_tensor(turns):
    # K' = R K R^T with R the rotation by quarter turns of a grid with unequal cells.
    geometry, area, equations = case(7, rows=5, columns=8)
    fit = fitted(geometry, area, equations, floor=300.0)

    def turn(field, axes=(1, 2)):
        # Rows run northward, so that NumPy's quarter turn is clockwise: turn it back.
        return np.rot90(field, -turns, axes=axes)

    R = np.linalg.matrix_power(np.array([[0.0, -1.0], [1.0, 0.0]]), turns)
    odd = turns % 2
    dx, dy = (geometry.dy, geometry.dx) if odd else (geometry.dx, geometry.dy)
    periodic = (geometry.periodic_x, geometry.periodic_y)
    turned = Geometry(
        np.ascontiguousarray(turn(dx, (0, 1))),
        np.ascontiguousarray(turn(dy, (0, 1))),
        np.ascontiguousarray(turn(geometry.mask)),
        *(periodic[::-1] if odd else periodic),
    )
    # rot90(m, -1) carries the first row to the last column: an eastward index becomes a
    # southward one in array order (row, column); with rows northward that is x -> -y.
    quarter = np.linalg.matrix_power(np.array([[0.0, -1.0], [1.0, 0.0]]), turns)
    there = NormalEquations(
        np.ascontiguousarray(R @ turn(equations.M) @ R.T),
        np.ascontiguousarray(R @ turn(equations.B) @ R.T),
        equations.weights,
    )
    other = fitted(turned, np.ascontiguousarray(turn(area)), there, floor=300.0)
    np.testing.assert_allclose(
        other.tensor, quarter @ turn(fit.tensor) @ quarter.T, rtol=1e-7, atol=1e-6
    )


def test_a_mirrored_grid_mirrors_the_tensor():
    geometry, area, equations = case(9)
    fit = fitted(geometry, area, equations, floor=300.0)
    mirror = np.diag([1.0, -1.0])
    flipped = Geometry(
        geometry.dx[::-1].copy(), geometry.dy[::-1].copy(), geometry.mask[:, ::-1].copy(),
        geometry.periodic_x, geometry.periodic_y,
    )  # fmt: skip
    there = NormalEquations(
        mirror @ equations.M[:, ::-1] @ mirror,
        mirror @ equations.B[:, ::-1] @ mirror,
        equations.weights,
    )
    other = fitted(flipped, area[:, ::-1].copy(), there, floor=300.0)
    np.testing.assert_allclose(
        other.tensor, mirror @ fit.tensor[:, ::-1] @ mirror, rtol=1e-7, atol=1e-6
    )
    np.testing.assert_allclose(
        symmetric_parts(other.tensor)[3], -symmetric_parts(fit.tensor)[3][:, ::-1], atol=1e-6
    )


def test_few_tracers_are_pulled_to_the_scalar_fit_and_enough_are_not():
    geometry, area, equations = case(6, tracers=2)
    four = fitted(geometry, area, equations, tracers=4, floor=0.0).tensor
    two = fitted(geometry, area, equations, tracers=2, floor=0.0).tensor
    hard = fitted(geometry, area, equations, scalar_pull=1e6, smoothing_length=0.0, floor=0.0)
    scalar = np.maximum(scalar_diffusivity(equations), 0.0)
    far, near = (
        np.abs(tensor - scalar[..., None, None] * np.eye(2))[geometry.mask].mean()
        for tensor in (four, two)
    )
    assert near < far
    expected = scalar[geometry.mask][:, None, None] * np.eye(2)
    np.testing.assert_allclose(hard.tensor[geometry.mask], expected, atol=1.0)


@quick
@given(
    parts=st.lists(st.floats(-1e5, 1e5, allow_subnormal=False), min_size=4, max_size=4),
    floor=st.floats(0.0, 1e3),
)
def test_raising_eigenvalues_is_what_an_eigenvalue_routine_does(parts, floor):
    tensor = np.array(parts).reshape(2, 2)
    found = with_floor(tensor, floor)
    values, vectors = np.linalg.eigh(0.5 * (tensor + tensor.T))
    expected = vectors @ np.diag(np.maximum(values, floor)) @ vectors.T + 0.5 * (tensor - tensor.T)
    np.testing.assert_allclose(found, expected, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(with_floor(found, floor), found, rtol=1e-12, atol=1e-9)


def test_the_scalar_fit_of_isotropic_mixing_is_its_diffusivity():
    geometry, _, equations = case(3, tensor=np.array([[700.0, -300.0], [300.0, 700.0]]))
    np.testing.assert_allclose(scalar_diffusivity(equations)[geometry.mask], 700.0, rtol=1e-10)
