"""Point features: canonical flows, symmetry, and inputs that lack something."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from features_cases import coordinates, mean_state, random_inputs
from learnclosure.errors import RoleError
from learnclosure.features.frames import frame_axes, tensor_to_frame, tensor_to_model
from learnclosure.features.inputs import compute_inputs, input_flags
from learnclosure.features.jet import find_jet
from learnclosure.features.mean_state import MeanState
from learnclosure.features.point import FUNCTIONS
from learnclosure.features.point_features import EVERY_GROUP, chosen_features, point_features
from learnclosure.quantities import FEATURES, INPUTS
from learnclosure.validation.symmetry import transform_inputs

quiet = settings(max_examples=30, derandomize=True, deadline=None)
REFLECTION = ((1.0, 0.0), (0.0, -1.0))


def rotation(angle):
    return ((np.cos(angle), -np.sin(angle)), (np.sin(angle), np.cos(angle)))


@pytest.mark.parametrize(
    ("flow", "vorticity", "okubo_weiss"),
    [("rotation", 2e-5, -4e-10), ("shear", -1e-5, 0.0), ("strain", 0.0, 4e-10)],
)
def test_okubo_weiss_of_the_canonical_flows(flow, vorticity, okubo_weiss):
    # Rate 1e-5 s-1; exact for centred differences (Okubo 1970, Weiss 1991, from memory).
    x, y = coordinates(mean_state())
    rate = 1e-5
    u, v = {
        "rotation": (-rate * y, rate * x),
        "shear": (rate * y, 0.0 * x),
        "strain": (rate * x, -rate * y),
    }[flow]
    inputs = compute_inputs(mean_state(u=u[None], v=v[None], beta=2e-11))
    features = point_features(np, inputs, False)
    np.testing.assert_allclose(features["rossby_number"] * 1e-4, vorticity, atol=1e-16)
    np.testing.assert_allclose(features["okubo_weiss_ratio"] * 1e-8, okubo_weiss, atol=1e-20)


@given(st.integers(0, 10_000), st.floats(0.0, 2 * np.pi), st.booleans())
@quiet
def test_features_do_not_change_when_the_axes_turn(seed, angle, energy):
    inputs = random_inputs(seed)
    turned = transform_inputs(inputs, rotation(angle))
    before, after = (point_features(np, each, energy, EVERY_GROUP) for each in (inputs, turned))
    for name in before:
        np.testing.assert_allclose(after[name], before[name], rtol=1e-9, atol=1e-12, err_msg=name)


@given(st.integers(0, 10_000), st.booleans())
@quiet
def test_features_are_those_of_the_mirror_image_in_the_other_hemisphere(seed, energy):
    inputs = random_inputs(seed)
    mirrored = transform_inputs(inputs, REFLECTION)
    np.testing.assert_array_equal(mirrored["coriolis_parameter"], -inputs["coriolis_parameter"])
    before, after = (point_features(np, each, energy, EVERY_GROUP) for each in (inputs, mirrored))
    for name in before:
        np.testing.assert_allclose(after[name], before[name], rtol=1e-12, atol=1e-15, err_msg=name)


@given(st.integers(0, 10_000))
@quiet
def test_a_tensor_goes_to_the_frame_and_back(seed):
    inputs = random_inputs(seed)
    axes = frame_axes(np, inputs)
    tensor = np.random.default_rng(seed).normal(size=(4, 40))
    back = tensor_to_model(np, axes, *tensor_to_frame(np, axes, *tensor))
    np.testing.assert_allclose(back, tensor, atol=1e-13)


def test_the_tensor_in_the_frame_is_the_one_turned_by_hand():
    # K' = R K R^T: [[3000, -500], [900, 1000]] turned by 30 degrees is
    # [[2326.794919, 266.025404], [1666.025404, 1673.205081]]; trace 4000 and alpha 700 stay.
    angle = -np.pi / 6
    inputs = {
        "pv_gradient_x": np.array([np.cos(angle)]) * 1e-11,
        "pv_gradient_y": np.array([np.sin(angle)]) * 1e-11,
        "coriolis_parameter": np.array([1e-4]),
    }
    axes = frame_axes(np, inputs)
    parts = (np.array([value]) for value in (3000.0, -500.0, 900.0, 1000.0))
    found = np.ravel(tensor_to_frame(np, axes, *parts))
    expected = [2326.794919, 266.025404, 1666.025404, 1673.205081]
    np.testing.assert_allclose(found, expected, rtol=1e-9)


@pytest.mark.parametrize("sign", [1.0, -1.0])
def test_a_gaussian_jet_is_found_with_its_width_and_side(sign):
    rows, width = 64, 15e3
    y = width * np.arange(rows)
    speed = 0.4 * np.exp(-(((y - y[30]) / 90e3) ** 2))
    u = np.stack([sign * speed, 0.0 * speed])[:, :, None] * np.ones((1, 1, 12))
    jet = find_jet(mean_state(rows=rows, columns=12, width=width, u=u, periodic=(True, False)))
    assert jet.found.all()
    np.testing.assert_allclose(jet.width, 90e3, rtol=0.05)
    # Left of the flow is north of an eastward jet and south of a westward one.
    np.testing.assert_allclose(jet.distance[36], sign * 1.0, rtol=0.06)
    np.testing.assert_array_equal(jet.distance[30], 0.0)


def test_a_jet_along_y_is_the_same_jet_turned():
    rows, width = 48, 15e3
    y = width * np.arange(rows)
    speed = 0.4 * np.exp(-(((y - y[20]) / 90e3) ** 2))
    along_x = mean_state(
        rows=rows, columns=16, width=width, u=speed[None, :, None] * np.ones((2, 1, 16))
    )
    # Turned by a right angle anticlockwise: eastward becomes northward, y becomes -x.
    turned = mean_state(
        rows=16, columns=rows, width=width, v=speed[::-1][None, None, :] * np.ones((2, 16, 1))
    )
    first, second = find_jet(along_x), find_jet(turned)
    np.testing.assert_allclose(second.distance[0, ::-1], first.distance[:, 0], rtol=1e-12)


ONE_CELL = np.zeros((2, 12, 14), bool)
ONE_CELL[:, 5, 6] = True
DEGENERATE = {
    "still water": {},
    "neutral stratification": {"gravity": (0.0,), "u": np.array([0.1, 0.0])[:, None, None]},
    "no rotation": {"coriolis": 0.0, "u": np.array([0.1, 0.0])[:, None, None]},
    "one sea cell": {"mask": ONE_CELL},
    "one layer": {"thickness": (4000.0,), "gravity": ()},
    "unstable stratification": {"gravity": (-0.01,)},
}


@pytest.mark.parametrize("case", DEGENERATE)
@pytest.mark.parametrize("energy", [True, False])
def test_inputs_that_lack_something_give_finite_features_and_a_flag(case, energy):
    layers = 1 if case == "one layer" else 2
    state = mean_state(**DEGENERATE[case], energy=np.zeros((layers, 12, 14)))
    inputs = compute_inputs(state)
    features = point_features(np, inputs, energy, EVERY_GROUP)
    assert all(np.isfinite(values).all() for values in (*inputs.values(), *features.values()))
    flags = input_flags(state)
    expected = {
        "still water": "no_flow",
        "neutral stratification": "no_stratification",
        "no rotation": "no_rotation",
        "one sea cell": "no_jet",
        "one layer": "no_stratification",
        "unstable stratification": "no_stratification",
    }[case]
    assert flags[expected][state.geometry.mask].all()


def test_every_input_and_feature_has_its_row_and_there_are_enough():
    state = mean_state(energy=np.full((2, 12, 14), 0.01))
    inputs = compute_inputs(state)
    assert set(inputs) == set(INPUTS)
    names = set()
    for energy in (False, True):
        names |= set(point_features(np, inputs, energy, EVERY_GROUP))
    assert names == set(FEATURES) == set(FUNCTIONS)
    assert len(FEATURES) >= 40
    for row in (*INPUTS.values(), *FEATURES.values()):
        assert row.units
        assert row.long_name
    assert all(row.topic for row in FEATURES.values())


def test_closures_see_the_standard_features_unless_told_otherwise():
    for energy in (False, True):
        standard = [row.name for row in chosen_features(energy)]
        assert all(FEATURES[name].standard for name in standard)
        assert len(standard) == (27 if energy else 26)
        everything = [row.name for row in chosen_features(energy, EVERY_GROUP)]
        assert set(standard) < set(everything)
    jets = {row.name for row in chosen_features(False, ("jet",))}
    assert {"jet_distance", "axis_distance", "jet_zone"} <= jets
    assert {FEATURES[name].topic for name in jets} == {"jet"}


def test_features_without_eddy_energy_need_none():
    state = mean_state()
    inputs = compute_inputs(state)
    assert not any(INPUTS[name].energy for name in inputs)
    assert not any(FEATURES[name].energy for name in point_features(np, inputs, False))


def test_a_missing_or_misshapen_mean_field_is_named():
    with pytest.raises(RoleError, match=r"mean fields are missing.*x_velocity"):
        MeanState.from_mapping({}, {})
    state = mean_state()
    arrays = {
        "x_velocity": state.x_velocity, "y_velocity": state.y_velocity,
        "layer_thickness": state.layer_thickness, "reduced_gravity": state.reduced_gravity,
        "coriolis_parameter": state.coriolis_parameter[:3],
        "planetary_beta_x": state.planetary_beta_x, "planetary_beta_y": state.planetary_beta_y,
        "sea_floor_depth": state.sea_floor_depth, "cell_width_x": state.geometry.dx,
        "cell_width_y": state.geometry.dy, "wet_share": state.geometry.mask.astype(float),
    }  # fmt: skip
    with pytest.raises(RoleError, match=r"coriolis_parameter.*wrong shape"):
        MeanState.from_mapping(arrays, {"periodic": "x"})
