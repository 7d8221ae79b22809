"""Jets that meander, that come in twos, and that are not there."""

from __future__ import annotations

import numpy as np
import pytest

from features_cases import mean_state
from learnclosure.features.beside_jet import place_beside_jets
from learnclosure.features.inputs import compute_inputs, input_flags
from learnclosure.features.jet_axes import find_axes
from learnclosure.features.point_features import EVERY_GROUP, point_features

ROWS, COLUMNS, WIDTH = 64, 96, 15e3


def flow_along(stream, width=WIDTH):
    """Velocity (-d psi/dy, d psi/dx) of a function of x and y, by differences."""
    y, x = np.mgrid[0:ROWS, 0:COLUMNS] * width
    step = 1.0
    u = -(stream(x, y + step) - stream(x, y - step)) / (2 * step)
    v = (stream(x + step, y) - stream(x - step, y)) / (2 * step)
    return x, y, u, v


def jet_state(u, v=None, **changed):
    spread = np.array([1.0, 0.2])[:, None, None]
    values = {"rows": ROWS, "columns": COLUMNS, "width": WIDTH, "periodic": (True, False)}
    return mean_state(
        u=u * spread, v=None if v is None else v * spread, beta=2e-11, **(values | changed)
    )


def erf(value):
    from scipy.special import erf as function

    return function(value)


def meander(amplitude, waves=2, scale=80e3, speed=0.5):
    """Jet ``speed exp(-(d/scale)^2)`` about a sinusoidal axis, from its streamfunction."""
    wavelength = COLUMNS * WIDTH / waves
    center = 0.5 * ROWS * WIDTH

    def axis(x):
        return center + amplitude * np.sin(2 * np.pi * x / wavelength)

    def slope(x):
        return 2 * np.pi * amplitude / wavelength * np.cos(2 * np.pi * x / wavelength)

    def stream(x, y):
        # Distance from the axis, to first order in its curvature.
        distance = (y - axis(x)) / np.sqrt(1.0 + slope(x) ** 2)
        # One place is the fastest.
        peak = speed * (1.0 + 0.05 * np.cos(2 * np.pi * x / (COLUMNS * WIDTH)))
        return -peak * scale * 0.5 * np.sqrt(np.pi) * erf(distance / scale)

    return axis, flow_along(stream)


@pytest.mark.parametrize("amplitude", [0.0, 60e3, 150e3])
def test_the_axis_follows_a_meander(amplitude):
    axis, (_, _, u, v) = meander(amplitude)
    state = jet_state(u[None], v[None])
    axes = find_axes(state.x_velocity[0], state.y_velocity[0], state.geometry)
    assert set(axes.number) == {0}
    # The point of the axis, moved from the centre of its cell along its normal.
    x = axes.column * WIDTH - axes.offset * axes.tangent_y
    y = axes.row * WIDTH + axes.offset * axes.tangent_x
    assert np.abs(y - axis(x)).max() < WIDTH
    assert np.ptp(axes.column) == COLUMNS - 1


def test_distance_width_and_side_beside_a_meander():
    axis, (x, y, u, v) = meander(100e3)
    state = jet_state(u[None], v[None])
    beside = place_beside_jets(state)
    assert beside.found.all()
    curve_x = np.linspace(-0.2, 1.2, 6000) * COLUMNS * WIDTH
    curve_y = axis(curve_x)
    near = np.abs(y - axis(x)) < 150e3
    for j, i in np.argwhere(near)[::41]:
        true = np.hypot(x[j, i] - curve_x, y[j, i] - curve_y).min()
        true = true if y[j, i] > axis(x[j, i]) else -true
        found = beside.distance[j, i] * beside.width[j, i]
        assert found == pytest.approx(true, abs=0.8 * WIDTH)
    # Smoothed over three cells: W^2 grows by 4/3 of the square of the cell.
    assert np.median(beside.width) == pytest.approx(np.hypot(80e3, 2 / 3**0.5 * WIDTH), rel=0.1)
    assert np.median(beside.speed) == pytest.approx(0.5, rel=0.1)
    np.testing.assert_allclose(np.hypot(beside.axis_x, beside.axis_y), 1.0, rtol=1e-12)


def two_jets(lower=0.3, upper=0.4, gap=360e3):
    y = WIDTH * np.arange(ROWS)
    below, above = y[32] - gap / 2, y[32] + gap / 2
    profile = lower * np.exp(-(((y - below) / 70e3) ** 2))
    profile = profile + upper * np.exp(-(((y - above) / 70e3) ** 2))
    return below, above, profile[None, :, None] * np.ones((1, 1, COLUMNS))


@pytest.mark.parametrize("lower", [0.3, -0.3])
def test_two_jets_are_two_and_each_point_belongs_to_the_nearer(lower):
    below, above, u = two_jets(lower)
    state = jet_state(u)
    beside = place_beside_jets(state)
    assert set(np.unique(beside.number)) == {0, 1}
    y = WIDTH * np.arange(ROWS)
    for row, position in enumerate(y):
        nearer = below if abs(position - below) < abs(position - above) else above
        if abs(abs(position - below) - abs(position - above)) < 2 * WIDTH:
            continue
        sign = np.sign(lower) if nearer == below else 1.0
        found = beside.distance[row, 40] * beside.width[row, 40]
        assert found == pytest.approx(
            sign * (position - nearer), abs=3e3 + 0.1 * abs(position - nearer)
        )
        speed = abs(lower) if nearer == below else 0.4
        assert beside.speed[row, 40] == pytest.approx(speed, rel=0.05)
    # Two jets raise the median flow they are measured against.
    np.testing.assert_allclose(beside.width, np.hypot(70e3, 2 / 3**0.5 * WIDTH), rtol=0.07)


def test_zones_of_a_jet():
    _, _, u = two_jets()
    found = point_features(np, compute_inputs(jet_state(u)), False, EVERY_GROUP)
    zone, distance = found["jet_zone"][0], np.abs(found["axis_distance"][0])
    assert set(np.unique(zone)) == {0.0, 1.0, 2.0}
    np.testing.assert_array_equal(zone == 2.0, distance < 1.0)
    np.testing.assert_array_equal(zone == 0.0, distance >= 2.5)
    np.testing.assert_allclose(found["jet_profile"][0], np.exp(-(distance**2)), rtol=1e-12)


def test_the_distance_along_the_axis_starts_where_the_jet_is_fastest():
    x = WIDTH * np.arange(COLUMNS)
    y = WIDTH * np.arange(ROWS)
    strength = 0.4 + 0.1 * np.cos(2 * np.pi * (x - x[30]) / (COLUMNS * WIDTH))
    u = strength[None, :] * np.exp(-(((y - y[32]) / 80e3) ** 2))[:, None]
    beside = place_beside_jets(jet_state(u[None]))
    along = beside.along[32] * beside.width[32]
    # Downstream is positive, and the far side is half way round.
    assert along[30] == pytest.approx(0.0, abs=WIDTH)
    assert along[40] == pytest.approx(10 * WIDTH, abs=WIDTH)
    assert along[20] == pytest.approx(-10 * WIDTH, abs=WIDTH)
    assert np.abs(along).max() == pytest.approx(0.5 * COLUMNS * WIDTH, rel=0.05)
    assert beside.distance[32] == pytest.approx(0.0, abs=1e-9)


@pytest.mark.parametrize("flow", ["still", "uniform", "weak"])
def test_no_jet_is_found_where_there_is_none(flow):
    random = np.random.default_rng(0)
    u = {
        "still": np.zeros((ROWS, COLUMNS)),
        "uniform": np.full((ROWS, COLUMNS), 0.2),
        "weak": 0.01 * random.normal(size=(ROWS, COLUMNS)),
    }[flow]
    state = jet_state(u[None], periodic=(True, True))
    inputs = compute_inputs(state)
    assert not inputs["axis_presence"].any()
    assert not inputs["axis_distance"].any()
    np.testing.assert_array_equal(inputs["axis_width"], inputs["deformation_radius"])
    assert input_flags(state)["no_jet_axis"].all()


def test_a_jet_turned_by_a_right_angle_is_the_same_jet():
    _, (_, _, u, v) = meander(100e3)
    first = place_beside_jets(jet_state(u[None], v[None]))
    # Turned anticlockwise: eastward becomes northward, y becomes -x.
    turned = mean_state(
        rows=COLUMNS, columns=ROWS, width=WIDTH, periodic=(False, True), beta=2e-11,
        u=np.stack([-v.T[:, ::-1], 0.2 * -v.T[:, ::-1]]),
        v=np.stack([u.T[:, ::-1], 0.2 * u.T[:, ::-1]]),
    )  # fmt: skip
    second = place_beside_jets(turned)
    np.testing.assert_allclose(second.distance[:, ::-1].T, first.distance, atol=1e-9)
    np.testing.assert_allclose(second.width[:, ::-1].T, first.width, rtol=1e-9)
    np.testing.assert_allclose(second.axis_y[:, ::-1].T, first.axis_x, atol=1e-9)
    np.testing.assert_allclose(-second.axis_x[:, ::-1].T, first.axis_y, atol=1e-9)


def test_the_mirror_image_has_the_opposite_side():
    _, (_, _, u, v) = meander(100e3)
    first = place_beside_jets(jet_state(u[None], v[None]))
    second = place_beside_jets(jet_state(u[None, ::-1], -v[None, ::-1]))
    np.testing.assert_allclose(second.distance[::-1], -first.distance, atol=1e-9)
    np.testing.assert_allclose(second.along[::-1], first.along, atol=1e-9)


def test_a_current_along_a_wall_is_a_jet():
    y = WIDTH * np.arange(ROWS)
    u = 0.4 * np.exp(-((y / 60e3) ** 2))[None, :, None] * np.ones((1, 1, COLUMNS))
    beside = place_beside_jets(jet_state(u))
    assert beside.found.all()
    assert np.all(np.abs(beside.distance[0]) < 0.3)
    assert np.all(beside.distance[4:] > 0.0)
