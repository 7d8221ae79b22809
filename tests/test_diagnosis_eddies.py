"""Every definition of eddies against plain NumPy: on levels and layers, whole and in part."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diagnosis_cases import MemoryEnsemble, box, random_ensemble
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.eddies import Accumulation
from learnclosure.diagnosis.moment_layout import group_sizes
from learnclosure.diagnosis.moments import MomentState, accumulate_moments
from learnclosure.errors import DiagnosisError
from learnclosure.study import DiagnosisSettings
from moments_cases import (
    AXES,
    GappedEnsemble,
    WeightedEnsemble,
    plain_flux,
    plain_mean,
    plain_subgrid_flux,
    plain_time_flux,
    uneven_grid,
    with_thickness,
)

quick = settings(derandomize=True, deadline=None, max_examples=15)
PLAIN = {
    "ensemble": plain_flux,
    "ensemble-subgrid": plain_subgrid_flux,
    "time": plain_time_flux,
}


def gapped(grid, members=5, times=3):
    """Members that are missing here and there."""
    plain = random_ensemble(grid, members=members, times=times, tracers=3)
    gone = np.random.default_rng(8).random(plain.values["x_velocity"].shape) < 0.2
    values = {name: np.where(gone, np.nan, values) for name, values in plain.values.items()}
    return GappedEnsemble(grid, values, plain.tracers, plain.withheld_tracers)


def kinds(members=5):
    grid = uneven_grid()
    return {
        "levels": random_ensemble(grid, members=members, times=3, tracers=3),
        "gaps": gapped(grid, members=members),
        "layers": with_thickness(grid, members=members),
    }


def close(found, expected, scale=1e-12):
    np.testing.assert_allclose(found, expected, rtol=1e-10, atol=scale * np.abs(expected).max())


@pytest.mark.parametrize("kind", ["levels", "gaps", "layers"])
@pytest.mark.parametrize("factor", [1, 2, 3])
@pytest.mark.parametrize("definition", ["ensemble", "time"])
def test_fluxes_and_means_are_what_plain_numpy_gives(definition, factor, kind):
    ensemble, members = kinds()[kind], np.arange(5)
    moments = accumulate_moments(ensemble, Coarsening(ensemble.grid, factor), definition)
    groups = {"whole": (moments.whole, members)}
    groups |= {f"half {n}": (half, members[n::2]) for n, half in enumerate(moments.halves)}
    for part, chosen in groups.values():
        for name in ("dye_a", "dye_c"):
            close(part.mean[name], plain_mean(ensemble, factor, chosen, name))
            for number, axis in enumerate(AXES):
                expected = PLAIN[definition](ensemble, factor, chosen, axis, name)
                close(part.flux[name][number], expected)
        energy = sum(PLAIN[definition](ensemble, factor, chosen, axis, axis) for axis in AXES)
        close(part.eddy_kinetic_energy, 0.5 * energy)


@pytest.mark.parametrize("kind", ["levels", "gaps", "layers"])
@pytest.mark.parametrize("definition", ["ensemble", "time"])
def test_leaving_a_group_out_is_leaving_it_out(definition, kind):
    # Delete-a-group jackknife: Shao and Wu 1989, Annals of Statistics 17, 1176-1197.
    members = 18
    ensemble = kinds(members)[kind]
    moments = accumulate_moments(ensemble, Coarsening(ensemble.grid, 2), definition)
    sizes = group_sizes(members)
    assert len(moments.left_out) == len(sizes) == 12
    for group in (0, 5, 11):
        rest = np.delete(np.arange(members), np.arange(group, members, len(sizes)))
        mean, flux = moments.without_member(group)
        close(mean["dye_b"], plain_mean(ensemble, 2, rest, "dye_b"))
        for number, axis in enumerate(AXES):
            expected = PLAIN[definition](ensemble, 2, rest, axis, "dye_b")
            close(flux["dye_b"][number], expected)


def test_sixteen_members_are_groups_of_their_own():
    assert group_sizes(16).tolist() == [1] * 16
    assert group_sizes(17).tolist() == [2] * 5 + [1] * 7
    assert sum(group_sizes(1000)) == 1000


@pytest.mark.parametrize("factor", [1, 2, 3])
def test_what_a_coarse_model_lacks_is_total_flux_minus_flux_of_means(factor):
    ensemble = random_ensemble(uneven_grid(), members=5, times=3, tracers=3)
    coarsening = Coarsening(ensemble.grid, factor)
    moments = accumulate_moments(ensemble, coarsening, "ensemble-subgrid")
    groups = [(moments.whole, np.arange(5)), (moments.halves[1], np.array([1, 3]))]
    for part, members in groups:
        for number, axis in enumerate(AXES):
            expected = plain_subgrid_flux(ensemble, factor, members, axis, "dye_b")
            close(part.flux["dye_b"][number], expected, 1e-11)
    mean, flux = moments.without_member(3)
    rest = np.array([0, 1, 2, 4])
    close(mean["dye_a"], plain_mean(ensemble, factor, rest, "dye_a"))
    close(flux["dye_a"][1], plain_subgrid_flux(ensemble, factor, rest, AXES[1], "dye_a"), 1e-11)


def test_without_coarsening_nothing_is_hidden_in_cells():
    ensemble = with_thickness(uneven_grid(), outcrops=False)
    both = [
        accumulate_moments(ensemble, Coarsening(ensemble.grid, 1), definition).whole
        for definition in ("ensemble", "ensemble-subgrid")
    ]
    close(both[0].flux["dye_a"], both[1].flux["dye_a"])
    close(both[0].mean["bolus_x"], both[1].mean["bolus_x"])


def test_on_the_coarse_grid_the_whole_transport_is_mean_plus_eddies():
    # <huc> = <h> u_hat c_hat + <h u''c''>: exact for averages with 1/N. Members that are
    # alike have no eddies about their mean, so that only what cells hide is left.
    one = with_thickness(uneven_grid(), members=1, times=1, outcrops=False)
    values = {name: np.repeat(value, 2, axis=1) for name, value in one.values.items()}
    ensemble = WeightedEnsemble(one.grid, values, one.tracers, one.withheld_tracers)
    coarsening = Coarsening(ensemble.grid, 3)
    whole = accumulate_moments(ensemble, coarsening, "ensemble-subgrid").whole
    h, u, c = (values[name][0, 0] for name in ("thickness", "x_velocity", "dye_a"))
    total = coarsening.mean(h * u * c)
    mean = whole.mean["thickness"] * whole.mean["x_velocity"] * whole.mean["dye_a"]
    close(mean + whole.mean["thickness"] * whole.flux["dye_a"][0], total)
    moved = whole.mean["x_velocity"] - whole.mean["bolus_x"]
    close(moved, coarsening.mean(u))


def test_thickness_weighted_averages_of_two_members_worked_by_hand():
    # Members h = (1, 3), u = (.1, .3), c = (10, 20) by hand: u_hat .25, c_hat 17.5,
    # <huc> - <h> u_hat c_hat = 9.5 - 8.75 = .75, bolus <h'u'>/<h> = .05. Eddies take the
    # factor N/(N - 1) = 2 for the number of members.
    one = np.ones((1, 2, 1, 1, 1))
    column = np.array([1.0, 2.0])[None, :, None, None, None]
    values = {
        "x_velocity": 0.2 * column - 0.1,
        "y_velocity": 0.0 * one,
        "dye_a": 10.0 * column,
        "thickness": 2.0 * column - 1.0,
    }
    ensemble = WeightedEnsemble(box(1, 1, 1), values, ("dye_a",))
    whole = accumulate_moments(ensemble, Coarsening(ensemble.grid, 1)).whole
    assert whole.mean["thickness"].item() == 2.0
    assert whole.mean["x_velocity"].item() == pytest.approx(0.25, rel=1e-15)
    assert whole.mean["dye_a"].item() == pytest.approx(17.5, rel=1e-15)
    assert whole.flux["dye_a"][0].item() == pytest.approx(2.0 * 0.75 / 2.0, rel=1e-14)
    assert whole.mean["bolus_x"].item() == pytest.approx(2.0 * 0.05, rel=1e-14)
    assert whole.flux["thickness"][0].item() == pytest.approx(0.2, rel=1e-14)


def test_equal_thickness_weighs_nothing():
    plain = random_ensemble(uneven_grid(), members=5, times=2, tracers=3)
    thickness = np.full(plain.values["x_velocity"].shape, 250.0)
    weighted = WeightedEnsemble(
        plain.grid, {**plain.values, "thickness": thickness}, plain.tracers, plain.withheld_tracers
    )
    for definition in PLAIN:
        one = accumulate_moments(plain, Coarsening(plain.grid, 2), definition)
        other = accumulate_moments(weighted, Coarsening(plain.grid, 2), definition)
        close(one.whole.flux["dye_a"], other.whole.flux["dye_a"])
        close(one.left_out[2][1]["dye_b"], other.left_out[2][1]["dye_b"])
        assert np.abs(other.whole.mean["bolus_x"]).max() < 1e-15


def test_the_share_of_members_that_count_is_told():
    ensemble = gapped(uneven_grid())
    share = accumulate_moments(ensemble, Coarsening(ensemble.grid, 1)).whole.valid_share
    present = np.isfinite(ensemble.values["dye_a"]).mean(axis=(0, 1))
    close(share, np.where(ensemble.grid.geometry.mask, present, 0.0))


def test_missing_values_are_refused_where_none_may_be():
    ensemble = random_ensemble(box(1, 4, 5), members=4, times=2, tracers=3)
    ensemble.values["dye_b"][1, 2, 0, 3, 1] = np.nan
    with pytest.raises(DiagnosisError, match=r"region 'basin': values are missing in the sea.*1 "):
        accumulate_moments(ensemble, Coarsening(ensemble.grid, 2))
    layers = with_thickness(uneven_grid(), outcrops=False)
    layers.values["thickness"][0, 0, layers.grid.geometry.mask] = -1.0
    with pytest.raises(DiagnosisError, match="thicknesses below zero, at time number 0"):
        accumulate_moments(layers, Coarsening(layers.grid, 1))


def test_one_time_has_no_mean_to_depart_from():
    ensemble = random_ensemble(box(1, 4, 5), members=4, times=1, tracers=3)
    with pytest.raises(DiagnosisError, match=r"one time has no eddies about a time mean"):
        accumulate_moments(ensemble, Coarsening(ensemble.grid, 1), "time")


def test_fluxes_within_the_sampling_window_are_added():
    ensemble = random_ensemble(uneven_grid(), members=6, times=2, tracers=3)
    plain = accumulate_moments(ensemble, Coarsening(ensemble.grid, 2))
    within = np.random.default_rng(4).normal(size=ensemble.values["dye_a"].shape)
    more = MemoryEnsemble(
        ensemble.grid, {**ensemble.values, "dye_a_within_y": within}, ensemble.tracers,
        ensemble.withheld_tracers,
    )  # fmt: skip
    found = accumulate_moments(more, Coarsening(ensemble.grid, 2))
    mean = Coarsening(ensemble.grid, 2).mean(within)
    close(found.whole.flux["dye_a"][1] - plain.whole.flux["dye_a"][1], mean.mean(axis=(0, 1)))
    close(found.whole.flux["dye_a"][0], plain.whole.flux["dye_a"][0])
    rest = np.delete(mean, 4, axis=1).mean(axis=(0, 1))
    close(found.left_out[4][1]["dye_a"][1] - plain.left_out[4][1]["dye_a"][1], rest)
    half = mean[:, 1::2].mean(axis=(0, 1))
    close(found.halves[1].flux["dye_a"][1] - plain.halves[1].flux["dye_a"][1], half)
    every = np.arange(6)
    close(found.subset(every)[1]["dye_a"], found.whole.flux["dye_a"])


def test_variances_and_upward_fluxes():
    ensemble = random_ensemble(uneven_grid(), members=6, times=2, tracers=3)
    w = np.random.default_rng(5).normal(size=ensemble.values["dye_a"].shape)
    ensemble.values |= {"z_velocity": w, "potential_vorticity": w**2}
    ensemble.active = ("potential_vorticity",)
    whole = accumulate_moments(ensemble, Coarsening(ensemble.grid, 2)).whole
    every = np.arange(6)
    expected = plain_flux(ensemble, 2, every, "z_velocity", "dye_b")
    close(whole.upward_flux["dye_b"], expected)
    expected = plain_flux(ensemble, 2, every, *2 * ("potential_vorticity",))
    close(whole.covariance["potential_vorticity", "potential_vorticity"], expected)
    close(whole.covariance[AXES], plain_flux(ensemble, 2, every, *AXES))
    expected = plain_flux(ensemble, 2, every, AXES[1], "potential_vorticity")
    close(whole.flux["potential_vorticity"][1], expected)


@quick
@given(cuts=st.lists(st.integers(1, 10), max_size=4), order=st.randoms(use_true_random=False))
@pytest.mark.parametrize("kind", ["levels", "layers"])
def test_any_sharing_of_times_and_any_order_of_merging_give_the_same(kind, cuts, order):
    grid = uneven_grid(4, 5, 1)
    make = {"levels": random_ensemble, "layers": with_thickness}[kind]
    ensemble = make(grid, members=4, times=11)
    whole = Accumulation(ensemble, Coarsening(grid, 2), "ensemble")
    bounds = sorted({0, *cuts, 11})
    chunk = type(whole.chunks()[0])
    parts = [whole.run(chunk(0, a, b)) for a, b in pairwise(bounds)]
    order.shuffle(parts)
    total = MomentState({})
    for part in parts:
        total = total.merge(part)
    reference = whole.run(chunk(0, 0, 11))
    assert total.sums.keys() == reference.sums.keys()
    for name, values in reference.sums.items():
        np.testing.assert_allclose(
            total.sums[name], values, rtol=1e-12, atol=1e-13 * np.abs(values).max()
        )


@pytest.mark.parametrize("definition", list(PLAIN))
def test_the_artefact_says_what_an_eddy_is(definition):
    ensemble = random_ensemble(box(1, 6, 8), members=5, times=3)
    chosen = DiagnosisSettings(eddies=definition, coarsen=2)
    said = diagnose(ensemble, chosen).attrs["eddy_definition"]
    words = {"ensemble": "same time; Reynolds", "ensemble-subgrid": "coarse", "time": "time mean"}
    assert words[definition] in said
    assert said.endswith("Reynolds average in each layer")
