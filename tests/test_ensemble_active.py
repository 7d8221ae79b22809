"""Reading fields that act on the flow: potential vorticity and layer thickness."""

from __future__ import annotations

import numpy as np
import pytest

from ensemble_cases import write_classic
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.errors import GridError, RoleError, SourceError, UnitError
from learnclosure.simulate.channel import simulate_channel
from learnclosure.simulate.dynamics import uniform_gradients
from learnclosure.study import parse_study
from simulate_cases import small_regime, started

DIMS = ("time", "layer", "y", "x")


def active(number, dataset):
    """Add both fields, with the attributes the simulator writes."""
    random = np.random.default_rng([5, number])
    shape = dataset["dye_a"].shape
    thickness = np.array([1000.0, 3000.0])[:, None, None] + random.normal(size=shape)
    dataset["thickness"] = (
        DIMS, thickness / 1000.0,
        {"units": "km", "active_role": "thickness", "standard_name": "cell_thickness",
         "left_out_gradient_y": np.array([-1e-6, 1e-6])},
    )  # fmt: skip
    dataset["q"] = (DIMS, 1e-6 * random.normal(size=shape), {"units": "s-1"})
    return dataset


def opened(folder, variables="", grid=""):
    text = (
        f'[[ensemble]]\nname = "west"\nfiles = "*.nc"\n[ensemble.variables]\n{variables}\n'
        f"[ensemble.grid]\n{grid}\n"
    )
    return open_ensemble(parse_study(text).ensembles[0], folder)


def test_attributes_and_the_study_name_what_is_there(tmp_path):
    write_classic(tmp_path, members=2, change=active)
    with opened(tmp_path) as ensemble:
        assert ensemble.active == ("thickness", "interface_height")
    named = 'potential_vorticity = "q"'
    with opened(tmp_path, named, "potential_vorticity_gradient = 2e-11") as ensemble:
        assert ensemble.active == ("potential_vorticity", "thickness", "interface_height")
        fields = ensemble.fields(1)
        assert ensemble.units["potential_vorticity"] == "s-1"
        assert ensemble.units["thickness"] == ensemble.units["interface_height"] == "m"
        left_out = ensemble.left_out_gradients
    np.testing.assert_allclose(left_out["potential_vorticity"], [[0, 0], [2e-11, 2e-11]])
    # km per m in the file
    np.testing.assert_allclose(left_out["thickness"], [[0, 0], [-1e-3, 1e-3]])
    np.testing.assert_allclose(left_out["interface_height"], [[0, 0], [1e-3, 0]])
    assert abs(fields["thickness"][:, 1].mean() - 3000.0) < 1.0
    # The interface stands on the lower layer, 4000 m above which the surface rests.
    np.testing.assert_allclose(fields["interface_height"][:, 0], fields["thickness"][:, 1] - 4000.0)
    np.testing.assert_allclose(fields["interface_height"][:, 1], -4000.0)


def test_the_resting_thickness_stays_what_the_fixed_variable_says(tmp_path):
    write_classic(tmp_path, members=2, change=active)
    with opened(tmp_path) as ensemble:
        np.testing.assert_array_equal(ensemble.grid.layer_thickness[:, 0, 0], [1000.0, 3000.0])


def test_a_thickness_that_alone_is_there_may_differ_between_members(tmp_path):
    write_classic(
        tmp_path, members=2,
        change=lambda number, one: active(number, one).drop_vars("layer_thickness"),
    )  # fmt: skip
    with opened(tmp_path) as ensemble:
        assert "the resting thickness is that of the first member" in ensemble.assumptions
        np.testing.assert_allclose(ensemble.grid.layer_thickness[0], 1000.0, atol=6.0)


def test_potential_vorticity_without_a_word_on_its_gradient_is_taken_as_whole(tmp_path):
    write_classic(tmp_path, members=2, change=active)
    with opened(tmp_path, 'potential_vorticity = "q"') as ensemble:
        assert "'q' holds all of its own mean gradient" in ensemble.assumptions
        assert not ensemble.left_out_gradients["potential_vorticity"].any()


def test_files_with_the_top_layer_last_are_turned_over(tmp_path):
    write_classic(tmp_path, members=2, change=active)
    with opened(tmp_path, grid='top = "last"\nreduced_gravity = [0.016]') as ensemble:
        np.testing.assert_allclose(ensemble.left_out_gradients["thickness"][1], [1e-3, -1e-3])
        assert ensemble.fields(0)["thickness"][0, 0].mean() > 2900.0


def test_thickness_of_levels_takes_no_part(tmp_path):
    write_classic(tmp_path, members=2, change=active)
    with opened(tmp_path, grid='vertical = "levels"') as ensemble:
        assert ensemble.active == ()
        assert "thickness" not in ensemble.fields(0)
        assert any("takes no part" in note for note in ensemble.assumptions)


@pytest.mark.parametrize("wrong", [0.0, -2.0])
def test_layers_that_vanish_are_refused(tmp_path, wrong):
    def change(number, dataset):
        dataset = active(number, dataset)
        dataset["thickness"][2, 0, 3, 4] = wrong
        return dataset

    write_classic(tmp_path, members=2, change=change)
    with opened(tmp_path) as ensemble:
        ensemble.fields(1)
        with pytest.raises(SourceError, match=r"thickness: layers vanish.*time number 2"):
            ensemble.fields(2)


def test_a_missing_variable_and_a_gradient_of_the_wrong_length_are_refused(tmp_path):
    write_classic(tmp_path, members=2, change=active)
    with pytest.raises(RoleError, match=r"named by '.ensemble.variables. thickness' is missing"):
        opened(tmp_path, 'thickness = "depth"')
    with pytest.raises(GridError, match=r"does not fit its layers .found 3 numbers"):
        opened(tmp_path, grid="thickness_gradient = [1.0, 2.0, 3.0]")


def test_a_passive_tracer_cannot_have_the_name_of_an_active_field(tmp_path):
    write_classic(tmp_path, members=2, change=active)
    with pytest.raises(RoleError, match="thickness: a tracer has the name of a field that acts"):
        opened(tmp_path, 'tracers = ["dye_a", "thickness"]')


def test_thickness_in_another_kind_of_unit_is_refused(tmp_path):
    def change(number, dataset):
        dataset = active(number, dataset)
        dataset["thickness"].attrs["units"] = "kg m-2"
        return dataset

    write_classic(tmp_path, members=2, change=change)
    with pytest.raises(UnitError, match="thickness"):
        opened(tmp_path)


def test_the_channel_writes_what_the_reader_finds(tmp_path):
    regime = small_regime()
    simulate_channel(
        regime, tmp_path, members=2, snapshots=2, spacing_days=1.0, spinup_days=2.0, tracer_days=1.0
    )
    with opened(tmp_path / "sedge") as ensemble:
        assert ensemble.active == ("potential_vorticity", "thickness", "interface_height")
        slopes = uniform_gradients(regime)
        for name, values in slopes.items():
            np.testing.assert_allclose(ensemble.left_out_gradients[name][1], values)
        thickness = ensemble.fields(0)["thickness"]
        np.testing.assert_allclose(
            thickness.sum(axis=1), np.stack([ensemble.grid.sea_floor_depth] * 2), atol=1e-3
        )
        assert thickness[:, 0].std() > 1.0


def test_potential_vorticity_of_the_channel_is_vorticity_and_stretching():
    # q = lap psi - f (h - H) / H in quasi-geostrophy (Pedlosky 1987, Geophysical Fluid
    # Dynamics, section 6.16; from memory), the ridge's part of the lower layer included.
    regime = small_regime(columns=48, rows=32, spacing=10.0e3)
    channel = started(regime, members=1)
    stream = channel.corner_streamfunction[0].astype(np.float64)
    k = 2 * np.pi * np.fft.fftfreq(48, 10e3)[None, :]
    l = 2 * np.pi * np.fft.fftfreq(32, 10e3)[:, None]  # noqa: E741
    # Back from the corners by half a cell.
    spectrum = np.fft.fft2(stream) * np.exp(-0.5j * 10e3 * (k + l))
    relative = np.fft.ifft2(-(k**2 + l**2) * spectrum).real
    resting = np.array(regime.thicknesses)[:, None, None]
    departure = (channel.layer_thicknesses()[0] - resting) / resting
    expected = relative - regime.coriolis_parameter * departure
    expected -= expected.mean(axis=(1, 2), keepdims=True)
    found = channel.vorticity[0] - channel.vorticity[0].mean(axis=(1, 2), keepdims=True)
    assert np.abs(found - expected).max() < 0.03 * np.abs(found).max()


def test_the_background_gradients_agree_with_each_other():
    # Q_i = beta - (f/H_i) d_y h_i
    regime = small_regime()
    slopes = uniform_gradients(regime)
    stretching = regime.coriolis_parameter / np.array(regime.thicknesses) * slopes["thickness"]
    np.testing.assert_allclose(slopes["potential_vorticity"], regime.beta - stretching)
