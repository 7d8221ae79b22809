"""Local frames: where they point, what falls back to what, and that they turn with the axes."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from features_cases import random_inputs
from learnclosure.export.builder import GraphBuilder
from learnclosure.export.trace import Traced, TracingNamespace
from learnclosure.features.frames import frame_axes, tensor_to_frame, tensor_to_model
from learnclosure.features.point_features import EVERY_GROUP, point_features
from learnclosure.validation.symmetry import (
    REFLECTION,
    rotation,
    transform_inputs,
    transform_tensor,
)

FRAMES = ("pv-gradient", "flow", "jet", "fixed")
quiet = settings(max_examples=25, derandomize=True, deadline=None)
every_frame = pytest.mark.parametrize("frame", FRAMES)


def eastward_jet(**changed):
    inputs = {
        "x_velocity": 0.3, "y_velocity": 0.0, "pv_gradient_x": 0.0, "pv_gradient_y": 5e-11,
        "planetary_beta_x": 0.0, "planetary_beta_y": 2e-11, "axis_direction_x": 1.0,
        "axis_direction_y": 0.0, "coriolis_parameter": 1e-4,
    }  # fmt: skip
    return {name: np.array([value]) for name, value in (inputs | changed).items()}


@every_frame
def test_in_an_eastward_jet_all_frames_agree(frame):
    axes = frame_axes(np, eastward_jet(), frame)
    np.testing.assert_allclose(np.ravel(axes[:4]), [0.0, 1.0, -1.0, 0.0], atol=1e-15)
    assert axes.defined == axes.own == 1.0


@every_frame
def test_in_the_south_the_first_axis_is_still_poleward_in_an_eastward_jet(frame):
    axes = frame_axes(np, eastward_jet(coriolis_parameter=-1e-4), frame)
    np.testing.assert_allclose(np.ravel(axes[:4]), [0.0, -1.0, -1.0, 0.0], atol=1e-15)


def test_each_frame_follows_its_own_direction():
    inputs = eastward_jet(
        x_velocity=0.0, y_velocity=0.1, axis_direction_x=-1.0, pv_gradient_x=3e-11,
        pv_gradient_y=4e-11,
    )  # fmt: skip
    expected = {
        "pv-gradient": (0.6, 0.8), "flow": (-1.0, 0.0), "jet": (0.0, -1.0), "fixed": (0.0, 1.0)
    }  # fmt: skip
    for frame, (nx, ny) in expected.items():
        axes = frame_axes(np, inputs, frame)
        np.testing.assert_allclose([axes.nx[0], axes.ny[0]], [nx, ny], atol=1e-15)


def test_without_flow_or_jet_the_potential_vorticity_gradient_stands_in():
    still = eastward_jet(x_velocity=0.0, axis_direction_x=0.0, pv_gradient_x=5e-11)
    reference = frame_axes(np, still, "pv-gradient")
    for frame in ("flow", "jet"):
        axes = frame_axes(np, still, frame)
        np.testing.assert_array_equal(axes[:4], reference[:4])
        assert axes.defined == 1.0
        assert axes.own == 0.0


def test_without_any_direction_a_frame_says_so():
    nothing = {name: 0.0 * values for name, values in eastward_jet().items()}
    for frame in FRAMES:
        axes = frame_axes(np, nothing, frame)
        assert axes.defined == axes.own == 0.0
        np.testing.assert_array_equal(np.ravel(axes[:4]), [0.0, 1.0, -1.0, 0.0])


@every_frame
@given(st.integers(0, 10_000), st.floats(0.0, 2 * np.pi), st.booleans())
@quiet
def test_tensors_learned_in_a_frame_turn_and_mirror_with_the_model_axes(
    frame, seed, angle, mirrored
):
    # A law of frame components and features gives R K R^T on turned or mirrored axes
    # (K' = R K R^T for any orthogonal R: definition of a tensor).
    inputs = random_inputs(seed)

    def law(given):
        features = point_features(np, given, True, EVERY_GROUP, frame)
        signal = np.tanh(np.stack([np.broadcast_to(v, 40) for v in features.values()]))
        nn, nt, tn, tt = (signal[k::4].sum(axis=0) for k in range(4))
        parts = tensor_to_model(np, frame_axes(np, given, frame), nn, nt, tn, tt)
        return np.column_stack(parts)

    matrix = np.array(rotation(angle))
    if mirrored:
        matrix = matrix @ np.array(REFLECTION)
    changed = law(transform_inputs(inputs, tuple(map(tuple, matrix))))
    expected = transform_tensor(law(inputs), tuple(map(tuple, matrix)))
    np.testing.assert_allclose(changed, expected, rtol=1e-9, atol=1e-9)


@every_frame
def test_the_graph_holds_the_same_frame_and_features(frame):
    from onnxruntime import InferenceSession

    inputs = random_inputs(5)
    builder = GraphBuilder()
    traced = {name: Traced(builder, builder.input(name)) for name in inputs}
    xp = TracingNamespace(builder)
    features = point_features(xp, traced, True, EVERY_GROUP, frame)
    tensor = tensor_to_frame(xp, frame_axes(xp, traced, frame), *list(traced.values())[:4])
    names = [*features, "nn", "nt", "tn", "tt"]
    for name, value in zip(names, (*features.values(), *tensor), strict=True):
        if value.name not in inputs:
            builder.output(f"out_{name}", value.name)
    model = builder.model("test", "", {})
    session = InferenceSession(model.SerializeToString(), providers=["CPUExecutionProvider"])
    used = {value.name for value in session.get_inputs()}
    outputs = session.run(None, {n: v[:, None] for n, v in inputs.items() if n in used})
    plain = point_features(np, inputs, True, EVERY_GROUP, frame)
    plain |= dict(
        zip(
            names[-4:],
            tensor_to_frame(np, frame_axes(np, inputs, frame), *list(inputs.values())[:4]),
            strict=True,
        )
    )
    assert len(session.get_outputs()) > 50
    for value, output in zip(session.get_outputs(), outputs, strict=True):
        np.testing.assert_allclose(
            output[:, 0], plain[value.name.removeprefix("out_")], rtol=1e-14, atol=1e-300
        )
