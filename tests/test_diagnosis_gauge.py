"""Divergent parts of fluxes: what each choice of gauge keeps, and that nothing else is kept."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diagnosis_cases import box, random_ensemble
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.estimate import Estimator
from learnclosure.diagnosis.gauge import HelmholtzSolver, rotational_share
from learnclosure.diagnosis.inversion import SmoothInversion
from learnclosure.diagnosis.memory import MemoryGradient
from learnclosure.diagnosis.moments import GroupMoments
from learnclosure.diagnosis.tensor import down_gradient
from learnclosure.ensemble.grid import Geometry, divergence, gradient
from learnclosure.errors import StudyError
from learnclosure.study import DiagnosisSettings, parse_study

CHOICES = ("no-flux", "zero-potential", "least-flux")
quick = settings(derandomize=True, deadline=None, max_examples=20)
every_choice = pytest.mark.parametrize("boundary", CHOICES)


def sea_area(geometry):
    return np.where(geometry.mask, geometry.area, 0.0)


def inner(first, second, geometry):
    return float((sea_area(geometry) * first * second).sum())


def coast_cells(geometry):
    """Cells with a closed face, from the mask alone."""
    padded = np.pad(geometry.mask, ((0, 0), (1, 1), (1, 1)))
    if geometry.periodic_x:
        padded[:, 1:-1, 0], padded[:, 1:-1, -1] = geometry.mask[..., -1], geometry.mask[..., 0]
    if geometry.periodic_y:
        padded[:, 0, 1:-1], padded[:, -1, 1:-1] = geometry.mask[:, -1], geometry.mask[:, 0]
    along_x = padded[:, 1:-1, 2:] & padded[:, 1:-1, :-2]
    along_y = padded[:, 2:, 1:-1] & padded[:, :-2, 1:-1]
    return geometry.mask & ~along_x, geometry.mask & ~along_y


def some_sea(seed, *, share=0.9, rows=9, columns=12, layers=2):
    """Unequal cells, random land, random periodic axes, and a random flux."""
    random = np.random.default_rng(seed)
    geometry = Geometry(
        dx=random.uniform(20e3, 40e3, (rows, columns)),
        dy=random.uniform(20e3, 40e3, (rows, columns)),
        mask=random.random((layers, rows, columns)) < share,
        periodic_x=bool(seed % 2),
        periodic_y=bool(seed % 3 == 0),
    )
    return geometry, random.normal(size=(2, *geometry.mask.shape)) * geometry.mask


def curl(psi, geometry):
    """Flux with stream function psi by the model's own differences."""
    slope_x, slope_y = gradient(psi, geometry)
    return np.stack([-slope_y, slope_x])


# Fox-Kemper, Ferrari and Pedlosky 2003, J. Phys. Oceanogr. 33, 478-483: on a bounded domain a
# harmonic flux may stand in either part. J = grad(x^2 - y^2) is also the curl of 2xy.
@pytest.mark.parametrize(("boundary", "share"), list(zip(CHOICES, (0.0, 1.0, 1.0), strict=True)))
def test_a_harmonic_flux_in_a_box_is_all_divergent_or_all_rotational(boundary, share):
    grid = box(1, 10, 13, dx=0.1, dy=0.07)
    x, y = np.meshgrid(grid.x, grid.y)
    flux = np.stack([2.0 * x, -2.0 * y])[:, None]
    part = HelmholtzSolver(grid.geometry, boundary).divergent_part(flux)
    np.testing.assert_allclose(part, (1.0 - share) * flux, atol=1e-12)
    np.testing.assert_allclose(
        rotational_share(flux, part, sea_area(grid.geometry)), share, atol=1e-12
    )
    inside = (slice(None), slice(1, -1), slice(1, -1))
    for spread in (divergence(*flux, grid.geometry), divergence(*part, grid.geometry)):
        assert np.abs(spread[inside]).max() < 1e-12


@pytest.mark.parametrize(("boundary", "share"), list(zip(CHOICES, (0.0, 0.0, 1.0), strict=True)))
def test_a_flux_straight_across_a_channel_is_harmonic(boundary, share):
    # The potential of the two walls may differ only where what passes between them is held.
    grid = box(1, 10, 8, periodic=(True, False))
    flux = np.stack([np.zeros(grid.shape), np.full(grid.shape, 3.0)])
    part = HelmholtzSolver(grid.geometry, boundary).divergent_part(flux)
    np.testing.assert_allclose(part, (1.0 - share) * flux, atol=1e-12)


@every_choice
def test_a_solid_rotation_of_flux_is_rotational_unless_it_meets_a_coast(boundary):
    # J = F (-y, x): no divergence, curl 2F.
    grid = box(1, 9, 9)
    x, y = np.meshgrid(grid.x - grid.x.mean(), grid.y - grid.y.mean())
    flux = np.stack([-y, x])[:, None]
    part = HelmholtzSolver(grid.geometry, boundary).divergent_part(flux)
    share = rotational_share(flux, part, sea_area(grid.geometry))
    if boundary == "no-flux":
        # The flux normal to the walls of a box belongs to the divergent part: n.grad chi = n.J.
        assert 0.05 < share[0] < 0.95
    else:
        np.testing.assert_allclose(share, 1.0, rtol=1e-12)
        assert np.abs(part).max() < 1e-12 * np.abs(flux).max()


@every_choice
@pytest.mark.parametrize("periodic", [(True, True), (True, False), (False, False)])
def test_a_rotational_flux_has_no_divergent_part(boundary, periodic):
    mask = np.ones((1, 14, 16), bool)
    mask[0, 6:8, 7:9] = False
    grid = box(1, 14, 16, mask=mask, periodic=periodic)
    x, y = np.meshgrid(np.arange(16), np.arange(14))
    near_land = np.maximum(np.abs(x - 7.5), np.abs(y - 6.5)) < 3.0
    near_edge = (np.minimum(x, 15 - x) < 2) | (np.minimum(y, 13 - y) < 2)
    psi = np.random.default_rng(3).normal(size=(1, 14, 16)) * ~(near_land | near_edge)
    flux = curl(psi, grid.geometry)
    assert np.abs(divergence(*flux, grid.geometry)).max() < 1e-14 * np.abs(flux).max()
    part = HelmholtzSolver(grid.geometry, boundary).divergent_part(flux)
    assert np.abs(part).max() < 1e-12 * np.abs(flux).max()
    share = rotational_share(flux, part, sea_area(grid.geometry))
    np.testing.assert_allclose(share, 1.0, rtol=1e-12)


def test_in_a_periodic_box_the_choices_differ_by_a_constant_vector():
    grid = box(2, 8, 12, dx=20e3, periodic=(True, True))
    flux = np.random.default_rng(1).normal(size=(2, *grid.shape)) + 0.4
    held, potential, least = (
        HelmholtzSolver(grid.geometry, boundary).divergent_part(flux) for boundary in CHOICES
    )
    mean = flux.mean(axis=(-2, -1), keepdims=True)
    np.testing.assert_allclose(held - least, np.broadcast_to(mean, flux.shape), atol=1e-12)
    np.testing.assert_allclose(potential, least, atol=1e-12)
    np.testing.assert_allclose(least.mean(axis=(-2, -1)), 0.0, atol=1e-12)


@pytest.mark.parametrize(
    ("tensor", "share"),
    [([[0.0, -800.0], [800.0, 0.0]], 1.0), ([[900.0, 0.0], [0.0, 900.0]], 0.0)],
)
def test_uniform_tensors_make_fluxes_of_one_kind(tensor, share):
    # div(alpha zhat x grad C) = 0, and -S grad C is a gradient, for uniform alpha and S.
    grid = box(2, 8, 10, periodic=(True, True))
    slope = np.stack(gradient(np.random.default_rng(4).normal(size=grid.shape), grid.geometry))
    everywhere = np.broadcast_to(tensor, (*grid.shape, 2, 2))
    flux = down_gradient(everywhere, slope[None])[0]
    for boundary in CHOICES:
        part = HelmholtzSolver(grid.geometry, boundary).divergent_part(flux)
        found = rotational_share(flux, part, sea_area(grid.geometry))
        np.testing.assert_allclose(found, share, atol=1e-12)


@quick
@given(seed=st.integers(0, 999), boundary=st.sampled_from(CHOICES))
def test_the_decomposition_is_an_orthogonal_projection(seed, boundary):
    geometry, flux = some_sea(seed)
    solver = HelmholtzSolver(geometry, boundary)
    part = solver.divergent_part(flux)
    np.testing.assert_allclose(solver.divergent_part(part), part, atol=1e-8)
    size = inner(flux, flux, geometry)
    assert abs(inner(part, flux - part, geometry)) < 1e-9 * size
    other = np.random.default_rng(seed + 1).normal(size=flux.shape)
    both = solver.divergent_part(np.stack([other, 3.0 * flux - other]))
    np.testing.assert_allclose(both.sum(axis=0), 3.0 * part, atol=1e-8)
    mirrored = inner(both[0], flux * geometry.mask, geometry)
    assert mirrored == pytest.approx(inner(other, part, geometry), rel=1e-7, abs=1e-8 * size)


@quick
@given(seed=st.integers(0, 999), boundary=st.sampled_from(CHOICES))
def test_the_divergence_is_kept_to_rounding(seed, boundary):
    geometry, flux = some_sea(seed)
    part = HelmholtzSolver(geometry, boundary).divergent_part(flux)
    lost = divergence(*part, geometry) - divergence(*flux, geometry)
    normal_x, normal_y = coast_cells(geometry)
    off_coast = geometry.mask & ~(normal_x | normal_y)
    kept = geometry.mask if boundary == "no-flux" else off_coast
    assert np.abs(lost[kept]).max(initial=0.0) < 1e-11 * np.abs(flux).max() / 20e3
    if boundary == "no-flux":
        np.testing.assert_allclose(part[0][normal_x], flux[0][normal_x], atol=1e-8)
        np.testing.assert_allclose(part[1][normal_y], flux[1][normal_y], atol=1e-8)


@quick
@given(seed=st.integers(0, 999))
def test_least_flux_has_the_smallest_mean_square_of_all_choices(seed):
    geometry, flux = some_sea(seed)
    sizes = [
        inner(part, part, geometry)
        for part in (HelmholtzSolver(geometry, name).divergent_part(flux) for name in CHOICES)
    ]
    assert sizes[2] <= sizes[1] * (1.0 + 1e-9)
    assert sizes[1] <= sizes[0] * (1.0 + 1e-9)
    assert sizes[0] <= inner(flux, flux, geometry) * (1.0 + 1e-9)


@pytest.mark.parametrize("boundary", ["no-flux", "least-flux"])
@pytest.mark.parametrize("seed", [2, 4, 7])
def test_it_is_the_least_flux_that_a_dense_solver_finds(boundary, seed):
    # Rows of the constraints by differentiating unit fluxes; minimum norm by LAPACK.
    geometry, flux = some_sea(seed, rows=6, columns=7, layers=1, share=0.85)
    geometry = Geometry(geometry.dx, geometry.dy, geometry.mask, False, False)
    flux = flux * geometry.mask
    units = np.eye(flux.size).reshape(flux.size, *flux.shape)
    spread = np.stack([divergence(*unit, geometry).ravel() for unit in units], axis=1)
    normal_x, normal_y = coast_cells(geometry)
    if boundary == "no-flux":
        at_coast = np.concatenate([normal_x.ravel(), normal_y.ravel()])
        rows = np.concatenate([spread * 30e3, np.eye(flux.size)[at_coast]])
    else:
        rows = spread[(geometry.mask & ~(normal_x | normal_y)).ravel()] * 30e3
    root = np.tile(np.sqrt(geometry.area).ravel(), 2)
    least = np.linalg.lstsq(rows / root, rows @ flux.ravel(), rcond=1e-12)[0] / root
    found = HelmholtzSolver(geometry, boundary).divergent_part(flux)
    np.testing.assert_allclose(found.ravel(), least, atol=1e-9)


def test_basins_that_do_not_touch_are_decomposed_each_by_itself():
    mask = np.ones((1, 8, 15), bool)
    mask[..., 7] = False
    grid = box(1, 8, 15, mask=mask)
    flux = np.random.default_rng(0).normal(size=(2, *mask.shape))
    west = mask & (np.arange(15) < 7)
    alone = Geometry(grid.geometry.dx, grid.geometry.dy, west, False, False)
    for boundary in CHOICES:
        together = HelmholtzSolver(grid.geometry, boundary).divergent_part(flux)
        by_itself = HelmholtzSolver(alone, boundary).divergent_part(flux)
        np.testing.assert_allclose(together[..., :7], by_itself[..., :7], atol=1e-12)
        assert np.all(together[..., 7] == 0.0)


def test_an_island_has_its_own_constant():
    mask = np.ones((1, 15, 16), bool)
    mask[0, 6:9, 7:10] = False
    geometry = box(1, 15, 16, mask=mask).geometry
    flux = np.random.default_rng(5).normal(size=(2, *mask.shape))
    normal_x, normal_y = coast_cells(geometry)
    x, y = np.meshgrid(np.arange(16), np.arange(15))
    ring = (normal_x | normal_y) & (np.maximum(np.abs(x - 8), np.abs(y - 7)) < 4)
    assert ring.sum() == 12
    net = {}
    for boundary in CHOICES:
        part = HelmholtzSolver(geometry, boundary).divergent_part(flux)
        net[boundary] = float((geometry.area * divergence(*part, geometry))[ring].sum())
    true = float((geometry.area * divergence(*flux, geometry))[ring].sum())
    assert net["no-flux"] == pytest.approx(true, rel=1e-9)
    assert net["zero-potential"] == pytest.approx(true, rel=1e-9)
    assert abs(net["least-flux"] - true) > 0.01 * abs(true)


@every_choice
@pytest.mark.parametrize("turns", [1, 2, 3])
def test_turning_the_grid_turns_the_parts(boundary, turns):
    geometry, flux = some_sea(7, rows=7, columns=10)
    part = HelmholtzSolver(geometry, boundary).divergent_part(flux)

    def turn(field, axes=(-2, -1)):
        # Rows run northward, so that NumPy's quarter turn is clockwise: turn it back.
        return np.ascontiguousarray(np.rot90(field, -turns, axes=axes))

    R = np.linalg.matrix_power(np.array([[0.0, -1.0], [1.0, 0.0]]), turns)
    odd = turns % 2
    dx, dy = (geometry.dy, geometry.dx) if odd else (geometry.dx, geometry.dy)
    periodic = (geometry.periodic_x, geometry.periodic_y)
    turned = Geometry(turn(dx), turn(dy), turn(geometry.mask), *periodic[:: -1 if odd else 1])
    there = HelmholtzSolver(turned, boundary).divergent_part(
        np.einsum("ab,blyx->alyx", R, turn(flux))
    )
    np.testing.assert_allclose(there, np.einsum("ab,blyx->alyx", R, turn(part)), atol=1e-9)


@every_choice
def test_land_never_reaches_the_parts_and_layers_do_not_mix(boundary):
    geometry, flux = some_sea(5, share=0.8)
    solver = HelmholtzSolver(geometry, boundary)
    quiet = solver.divergent_part(flux)
    np.testing.assert_array_equal(
        solver.divergent_part(np.where(geometry.mask, flux, np.nan)), quiet
    )
    assert np.all(quiet[:, ~geometry.mask] == 0.0)
    changed = flux.copy()
    changed[:, 1] *= -2.0
    np.testing.assert_array_equal(solver.divergent_part(changed)[:, 0], quiet[:, 0])


def test_a_flux_of_another_grid_is_refused():
    solver = HelmholtzSolver(box(1, 4, 5).geometry)
    with pytest.raises(ValueError, match=r"flux of shape \(2, 1, 5, 4\) on a grid of shape"):
        solver.divergent_part(np.zeros((2, 1, 5, 4)))


def test_a_layer_without_flux_has_no_share():
    flux = np.zeros((2, 2, 3, 4))
    flux[:, 1] = 1.0
    share = rotational_share(flux, 0.5 * flux, np.ones((2, 3, 4)))
    assert np.isnan(share[0])
    assert share[1] == pytest.approx(0.25)


def test_the_divergent_part_gives_the_diffusivity_under_a_rotational_flux():
    grid = box(1, 12, 16, periodic=(True, True))
    random = np.random.default_rng(6)
    names = ("dye_a", "dye_b", "dye_c", "dye_d")
    mean = {name: random.normal(size=grid.shape) for name in names}
    flux = {}
    for name in names:
        slope = np.stack(gradient(mean[name], grid.geometry))
        flux[name] = -900.0 * slope + curl(2e3 * random.normal(size=grid.shape), grid.geometry)
    moments = GroupMoments(mean, flux, np.ones(grid.shape))
    area, options = sea_area(grid.geometry), DiagnosisSettings(smoothing_length=20e3, floor=0.0)
    inversion = SmoothInversion(grid.geometry, area, options, len(names))
    gauge = HelmholtzSolver(grid.geometry)
    calm = np.zeros(grid.shape)
    still = MemoryGradient((calm, calm), grid.geometry, 0.0, 0.0)
    full, half, divergent = (
        Estimator(grid.geometry, area, inversion, names, still, gauge, weight).group(moments)
        for weight in (1.0, 0.5, 0.0)
    )
    expected = np.broadcast_to(900.0 * np.eye(2), divergent.smooth.tensor.shape)
    np.testing.assert_allclose(divergent.smooth.tensor, expected, atol=1e-8)
    far, near = (np.abs(group.smooth.tensor - expected).max() for group in (full, half))
    assert far > 300.0
    assert 0.3 * far < near < 0.7 * far


def gauged(**settings):
    mask = np.arange(80).reshape(1, 8, 10) * np.ones((2, 1, 1)) > 12
    ensemble = random_ensemble(box(2, 8, 10, mask=mask))
    return diagnose(ensemble, DiagnosisSettings(coarsen=1, floor=0.0, **settings)), ensemble


def test_the_artefact_tells_the_rotational_share_and_the_gauge():
    plain, ensemble = gauged()
    chosen, _ = gauged(flux="divergent", gauge_boundary="least-flux")
    names = ("inverted_flux", "gauge_boundary", "rotational_weight")
    assert [plain.attrs[name] for name in names] == ["full", "no-flux", 1.0]
    assert [chosen.attrs[name] for name in names] == ["divergent", "least-flux", 0.0]
    for statistics, boundary in ((plain, "no-flux"), (chosen, "least-flux")):
        share = statistics["rotational_share"]
        assert share.dims == ("tracers", "layer")
        assert statistics["tracer"].values.tolist() == [f"dye_{letter}" for letter in "abcde"]
        flux = np.stack([plain[f"dye_b_eddy_flux_{axis}"].values for axis in "xy"])
        part = HelmholtzSolver(ensemble.grid.geometry, boundary).divergent_part(flux)
        expected = rotational_share(flux, part, sea_area(ensemble.grid.geometry))
        np.testing.assert_allclose(share[1], expected, rtol=1e-12)
    assert np.all(plain["rotational_share"] < chosen["rotational_share"])
    # What is written is the eddy flux itself, whichever part of it is inverted.
    np.testing.assert_array_equal(plain["dye_b_eddy_flux_y"], chosen["dye_b_eddy_flux_y"])


def test_the_tensor_its_error_and_its_skill_are_of_the_part_that_is_inverted():
    plain, half, divergent = (
        gauged(**settings)[0]
        for settings in (
            {}, {"flux": "divergent", "rotational_weight": 0.5}, {"flux": "divergent"},
        )
    )  # fmt: skip
    for name in ("transport_tensor_xy", "transport_tensor_xy_standard_error"):
        assert np.nanmax(np.abs(plain[name].values - divergent[name].values)) > 1.0
    # Least squares are linear in the flux: half of the rotational part is half the way.
    full, between, none = (
        statistics["least_squares_tensor_yx"].values for statistics in (plain, half, divergent)
    )
    np.testing.assert_allclose(between, 0.5 * (full + none), rtol=1e-9, atol=1e-9)
    for name in ("withheld_flux_skill", "withheld_divergent_flux_skill"):
        assert plain[name].dims == ("withheld", "layer")
        assert np.all(plain[name].values < 1.0)
        assert np.all(plain[name].values != divergent[name].values)


def test_a_share_of_the_rotational_part_beyond_all_of_it_is_refused():
    text = '[[ensemble]]\nname = "north"\nfiles = "n/*.nc"\n[diagnosis]\nrotational_weight = 1.5\n'
    with pytest.raises(StudyError, match=r"rotational_weight: Input should be less than or equal"):
        parse_study(text)
    with pytest.raises(StudyError, match=r"gauge_boundary: Input should be 'no-flux'"):
        parse_study(text.replace("rotational_weight = 1.5", 'gauge_boundary = "open"'))


def test_a_constant_added_to_alpha_changes_nothing_that_the_least_flux_keeps():
    # div(alpha zhat x grad C) = 0 for constant alpha: only grad(alpha) moves a tracer.
    grid = box(1, 10, 12)
    slope_x, slope_y = gradient(np.random.default_rng(9).normal(size=grid.shape), grid.geometry)
    flux = np.random.default_rng(10).normal(size=(2, *grid.shape))
    more = flux + 700.0 * np.stack([slope_y, -slope_x])
    solver = HelmholtzSolver(grid.geometry, "least-flux")
    assert np.abs(more - flux).max() > 1e-3
    np.testing.assert_allclose(solver.divergent_part(more), solver.divergent_part(flux), atol=1e-12)
