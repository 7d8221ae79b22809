"""Means and eddy fluxes: unbiased, streamed, split in halves and without single members."""

from __future__ import annotations

import tracemalloc

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diagnosis_cases import MemoryEnsemble, box, random_ensemble
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.moments import accumulate_moments
from learnclosure.diagnosis.sampling import jackknife_standard_error, spearman_brown
from learnclosure.ensemble.grid import Geometry, Grid
from learnclosure.errors import DiagnosisError

quick = settings(derandomize=True, deadline=None, max_examples=25)


def uneven_grid(rows, columns, seed):
    """Make a grid of unequal cells with some land."""
    random = np.random.default_rng(seed)
    plain = box(2, rows, columns)
    geometry = Geometry(
        dx=random.uniform(10e3, 20e3, (rows, columns)),
        dy=random.uniform(10e3, 20e3, (rows, columns)),
        mask=random.random((2, rows, columns)) < 0.8,
        periodic_x=True,
        periodic_y=False,
    )
    return Grid(**{**vars(plain), "geometry": geometry})


def without(ensemble: MemoryEnsemble, member: int) -> MemoryEnsemble:
    values = {name: np.delete(value, member, axis=1) for name, value in ensemble.values.items()}
    return MemoryEnsemble(ensemble.grid, values, ensemble.tracers, ensemble.withheld_tracers)


def test_fluxes_and_energy_are_unbiased_covariances():
    # The unbiased estimate divides by N - 1; NumPy's own covariance is the judge.
    ensemble = random_ensemble(box(2, 4, 4), members=5, times=3)
    moments = accumulate_moments(ensemble, Coarsening(ensemble.grid, 1)).whole
    u, v, c = (ensemble.values[name] for name in ("x_velocity", "y_velocity", "dye_a"))
    place = (1, 2, 3)
    at = (slice(None), slice(None), *place)
    expected = [
        np.mean([np.cov(a, b)[0, 1] for a, b in zip(w[at], c[at], strict=True)]) for w in (u, v)
    ]
    found = moments.flux["dye_a"][(slice(None), *place)]
    np.testing.assert_allclose(found, expected, rtol=1e-12)
    energy = 0.5 * np.mean(
        [np.var(a, ddof=1) + np.var(b, ddof=1) for a, b in zip(u[at], v[at], strict=True)]
    )
    assert moments.eddy_kinetic_energy[place] == pytest.approx(energy, rel=1e-12)
    assert moments.mean["dye_a"][place] == pytest.approx(c[at].mean(), rel=1e-12)


def test_five_members_of_a_known_law_give_its_covariance_on_average():
    # <u'c'> = .5: dividing by N = 5 gives .4 on average, by N - 1 gives .5.
    random = np.random.default_rng(3)
    grid = box(1, 40, 50)
    u = random.normal(size=(10, 5, *grid.shape))
    values = {
        "x_velocity": u,
        "y_velocity": 0.0 * u,
        "dye_a": 0.5 * u + random.normal(size=u.shape),
    }
    moments = accumulate_moments(MemoryEnsemble(grid, values, ("dye_a",)), Coarsening(grid, 1))
    sample = moments.whole.flux["dye_a"][0]
    assert sample.mean() == pytest.approx(0.5, abs=4.0 * sample.std() / np.sqrt(sample.size))
    assert abs(sample.mean() - 0.4) > 20.0 * sample.std() / np.sqrt(sample.size)


@pytest.mark.parametrize(("members", "factor"), [(4, 1), (5, 2), (7, 3)])
def test_leaving_a_member_out_in_closed_form_is_leaving_it_out(members, factor):
    grid = uneven_grid(7, 9, seed=members)
    ensemble = random_ensemble(grid, members=members, times=2, tracers=2)
    moments = accumulate_moments(ensemble, Coarsening(grid, factor))
    for member in range(members):
        mean, flux = moments.without_member(member)
        direct = accumulate_moments(without(ensemble, member), Coarsening(grid, factor)).whole
        for name in ("dye_a", "dye_b"):
            np.testing.assert_allclose(flux[name], direct.flux[name], rtol=1e-9, atol=1e-15)
            np.testing.assert_allclose(mean[name], direct.mean[name], rtol=1e-12, atol=1e-15)


@pytest.mark.parametrize("members", [4, 5, 8])
def test_two_halves_combine_to_the_whole(members):
    # Chan, Golub and LeVeque 1983, Am. Stat. 37, 242-247 (from memory): sums of products
    # add up, plus n1 n2/N times the product of the differences of the means.
    ensemble = random_ensemble(box(1, 4, 5), members=members, times=1)
    moments = accumulate_moments(ensemble, Coarsening(ensemble.grid, 1))
    first, second = moments.halves
    n1, n2 = (members + 1) // 2, members // 2
    for name in ensemble.tracers:
        mean = (n1 * first.mean[name] + n2 * second.mean[name]) / members
        np.testing.assert_allclose(mean, moments.whole.mean[name], rtol=1e-12)
        apart = {
            key: first.mean[key] - second.mean[key] for key in (name, "x_velocity", "y_velocity")
        }
        between = np.stack([apart["x_velocity"], apart["y_velocity"]]) * apart[name]
        summed = (
            (n1 - 1) * first.flux[name] + (n2 - 1) * second.flux[name] + n1 * n2 / members * between
        )
        np.testing.assert_allclose(
            summed / (members - 1), moments.whole.flux[name], rtol=1e-9, atol=1e-15
        )


def test_each_half_is_what_its_own_members_give():
    ensemble = random_ensemble(box(1, 4, 6), members=6, times=2)
    moments = accumulate_moments(ensemble, Coarsening(ensemble.grid, 2))
    odd = {name: value[:, 1::2] for name, value in ensemble.values.items()}
    alone = MemoryEnsemble(ensemble.grid, odd, ensemble.tracers, ensemble.withheld_tracers)
    direct = accumulate_moments(alone, Coarsening(ensemble.grid, 2)).whole
    np.testing.assert_allclose(
        moments.halves[1].flux["dye_b"], direct.flux["dye_b"], rtol=1e-9, atol=1e-15
    )
    np.testing.assert_allclose(
        moments.halves[1].eddy_kinetic_energy, direct.eddy_kinetic_energy, rtol=1e-9
    )


@pytest.mark.parametrize("members", [2, 3])
def test_few_members_are_not_split(members):
    ensemble = random_ensemble(box(1, 3, 3), members=members)
    assert accumulate_moments(ensemble, Coarsening(ensemble.grid, 1)).halves == ()


def test_one_member_has_no_eddies():
    ensemble = random_ensemble(box(1, 3, 3), members=1)
    with pytest.raises(DiagnosisError, match=r"region 'basin'.*one member.*at least 2 members"):
        accumulate_moments(ensemble, Coarsening(ensemble.grid, 1))


def test_times_are_read_once_in_order_and_memory_does_not_grow_with_them():
    peaks = []
    for times in (4, 12):
        ensemble = random_ensemble(box(1, 30, 30), members=4, times=times, tracers=2)
        tracemalloc.start()
        accumulate_moments(ensemble, Coarsening(ensemble.grid, 2))
        peaks.append(tracemalloc.get_traced_memory()[1])
        tracemalloc.stop()
        assert ensemble.asked == list(range(times))
    assert peaks[1] < 1.1 * peaks[0]


@pytest.mark.parametrize("factor", [1, 2, 3])
def test_land_never_influences_the_sea(factor):
    grid = uneven_grid(7, 8, seed=1)
    ensemble = random_ensemble(grid, members=4)
    quiet = accumulate_moments(ensemble, Coarsening(grid, factor))
    for value in ensemble.values.values():
        value[:, :, ~grid.geometry.mask] = 1e30
    loud = accumulate_moments(ensemble, Coarsening(grid, factor))
    for one, other in ((quiet.whole, loud.whole), (quiet.halves[0], loud.halves[0])):
        np.testing.assert_array_equal(one.flux["dye_a"], other.flux["dye_a"])
        np.testing.assert_array_equal(one.mean["dye_a"], other.mean["dye_a"])
        np.testing.assert_array_equal(one.eddy_kinetic_energy, other.eddy_kinetic_energy)


@quick
@given(
    rows=st.integers(1, 9),
    columns=st.integers(1, 9),
    factor=st.integers(1, 5),
    seed=st.integers(0, 99),
)
def test_block_means_conserve_content_area_and_constants(rows, columns, factor, seed):
    grid = uneven_grid(rows, columns, seed)
    coarsening = Coarsening(grid, factor)
    field = np.random.default_rng(seed).normal(size=grid.shape)
    fine_area = np.where(grid.geometry.mask, grid.geometry.area, 0.0)
    coarse_area = coarsening.wet_share * sum_of_blocks(grid.geometry.area, factor)
    np.testing.assert_allclose(coarse_area.sum(), fine_area.sum(), rtol=1e-12)
    mean = coarsening.mean(field)
    np.testing.assert_allclose(
        (coarse_area * mean).sum(), (fine_area * field).sum(), rtol=1e-9, atol=1e-3
    )
    assert mean.shape == (2, -(-rows // factor), -(-columns // factor))
    wet = coarsening.geometry.mask
    np.testing.assert_allclose(coarsening.mean(np.full(grid.shape, 7.0))[wet], 7.0, rtol=1e-14)
    assert np.all(mean[~wet] == 0.0)
    assert np.all((coarsening.wet_share > 0.0) == wet)


def sum_of_blocks(values, factor):
    return np.array(
        [
            [
                values[row : row + factor, column : column + factor].sum()
                for column in range(0, values.shape[1], factor)
            ]
            for row in range(0, values.shape[0], factor)
        ]
    )


def test_a_last_block_that_is_not_full_is_narrower():
    grid = box(1, 5, 7, dx=10e3, dy=20e3)
    coarsening = Coarsening(grid, 3)
    np.testing.assert_allclose(coarsening.geometry.dx[0], [30e3, 30e3, 10e3])
    np.testing.assert_allclose(coarsening.geometry.dy[:, 0], [60e3, 40e3])
    np.testing.assert_allclose(coarsening.x, [15e3, 45e3, 65e3])
    np.testing.assert_allclose(coarsening.y, [30e3, 80e3])


def test_jackknife_of_a_mean_is_its_standard_error():
    # s/sqrt(N) exactly; [1, 2, 3, 4, 10] worked by hand gives 1.5811388.
    sample = np.array([1.0, 2.0, 3.0, 4.0, 10.0])
    means = np.array([np.delete(sample, member).mean() for member in range(5)])
    assert jackknife_standard_error(means) == pytest.approx(1.5811388, abs=5e-8)
    assert jackknife_standard_error(means) == pytest.approx(sample.std(ddof=1) / np.sqrt(5.0))


def test_reliability_of_a_whole_from_its_halves():
    # Spearman 1910 and Brown 1910, Brit. J. Psychol. 3 (from memory): 2r/(1+r).
    halves = np.array([0.25, 0.5, 0.6, 0.8, 1.0])
    np.testing.assert_allclose(spearman_brown(halves), [0.4, 0.6667, 0.75, 0.8889, 1.0], atol=5e-5)
    assert spearman_brown(np.array(-0.3)) == 0.0
