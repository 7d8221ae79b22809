"""Each audit check passes for a sound closure and fails for one broken in its own way."""

from __future__ import annotations

from types import SimpleNamespace

import numpy as np
import pytest

from learnclosure.ensemble.grid import Geometry
from learnclosure.quantities import Quantity
from learnclosure.validation.audit import audit
from learnclosure.validation.audit_inputs import AuditRegion
from learnclosure.validation.budget import adjoint_gradient, stable_time_step, variance_budget
from learnclosure.validation.symmetry import (
    REFLECTION,
    rotation,
    transform_inputs,
    transform_tensor,
)

FLOOR, CAP = 50.0, 5.0e4


def row(name, parity):
    return Quantity(name, name, "1", name, "input", parity=parity)


ROWS = {
    item.name: item
    for item in (
        row("x_velocity", "vector"),
        row("y_velocity", "vector"),
        row("coriolis_parameter", "pseudo-scalar"),
        row("planetary_beta_x", "pseudo-vector"),
        row("planetary_beta_y", "pseudo-vector"),
        row("velocity_gradient_xx", "tensor"),
        row("velocity_gradient_xy", "tensor"),
        row("velocity_gradient_yx", "tensor"),
        row("velocity_gradient_yy", "tensor"),
        row("deformation_radius", "scalar"),
    )
}


def sound_tensor(inputs):
    """Diffusivity along the flow, bounded, with a rotational part that mirrors."""
    u, v = inputs["x_velocity"], inputs["y_velocity"]
    square = np.minimum(u * u + v * v, 1e8)
    direction = np.hypot(u, v)
    nx = np.where(direction > 0, u / np.where(direction > 0, direction, 1.0), 0.0)
    ny = np.where(direction > 0, v / np.where(direction > 0, direction, 1.0), 0.0)
    along = np.minimum(1e3 * square, CAP - 2 * FLOOR)
    vorticity = inputs["velocity_gradient_yx"] - inputs["velocity_gradient_xy"]
    alpha = 1e3 * np.tanh(vorticity)
    base = 2 * FLOOR
    return np.stack(
        [
            base + along * nx * nx,
            along * nx * ny - alpha,
            along * nx * ny + alpha,
            base + along * ny * ny,
        ],
        axis=1,
    )


class FakeClosure:
    """A closure that is sound unless a breakage is given."""

    def __init__(self, breakage=None):
        self.breakage = breakage

    def predict(self, inputs):
        """Answer for every point."""
        answer = SimpleNamespace(
            tensor=sound_tensor(inputs),
            half_width=np.ones((len(inputs["x_velocity"]), 4)),
            trust=np.ones(len(inputs["x_velocity"])),
        )
        if self.breakage is not None:
            self.breakage(answer, inputs)
        return answer


def region(name="sea"):
    shape = (2, 10, 12)
    layer, line, column = (part.ravel() for part in np.indices(shape))
    random = np.random.default_rng(3)
    inputs = {key: random.normal(size=layer.size) for key in ROWS}
    inputs["deformation_radius"] = np.full(layer.size, 3e4)
    geometry = Geometry(
        np.full(shape[1:], 3e4), np.full(shape[1:], 2e4), np.ones(shape, bool), True, False
    )
    return AuditRegion(name, inputs, layer, line, column, geometry)


def checks(breakage=None):
    made = audit(FakeClosure(breakage), [region()], floor=FLOOR, cap=CAP, table=ROWS)
    return {check.check: check for check in made}


def test_a_sound_closure_passes_every_check():
    made = checks()
    assert len(made) == 11
    for check in made.values():
        assert check.passed, check
        assert check.meaning
        assert isinstance(check.value, float)
        assert isinstance(check.passed, bool)


def negative(answer, inputs):
    answer.tensor[3] = [-100.0, 0.0, 0.0, 200.0]


def barely_below_the_floor(answer, inputs):
    answer.tensor[3] = [0.9 * FLOOR, 0.0, 0.0, 200.0]


def too_large(answer, inputs):
    answer.tensor[3] = [1.01 * CAP, 0.0, 0.0, 200.0]


def too_large_both_ways(answer, inputs):
    answer.tensor[:] = [1.2 * CAP, 0.0, 0.0, 1.2 * CAP]


def rotational_excess(answer, inputs):
    answer.tensor[:, 1] += 2 * CAP
    answer.tensor[:, 2] -= 2 * CAP


def fixed_axes(answer, inputs):
    answer.tensor[:, 0] += 100.0


def unmirrored(answer, inputs):
    answer.tensor[:, 1] -= 70.0
    answer.tensor[:, 2] += 70.0


def variance_source(answer, inputs):
    answer.tensor[:, [0, 3]] -= 2000.0


def mistrusted(answer, inputs):
    answer.trust[0] = 1.1


def untrusted(answer, inputs):
    answer.trust[0] = np.nan


def broken_where_still(answer, inputs):
    answer.tensor[inputs["x_velocity"] == 0.0] = np.nan


def negative_width(answer, inputs):
    answer.half_width[0, 2] = -1.0


@pytest.mark.parametrize(
    ("breakage", "check"),
    [
        (negative, "positive semi-definite"),
        (barely_below_the_floor, "positive semi-definite"),
        (too_large, "largest eigenvalue"),
        (rotational_excess, "antisymmetric part"),
        (fixed_axes, "rotation"),
        (unmirrored, "reflection and hemisphere"),
        (variance_source, "variance dissipation"),
        (too_large_both_ways, "explicit time step"),
        (mistrusted, "trust between 0 and 1"),
        (untrusted, "trust between 0 and 1"),
        (broken_where_still, "finite on degenerate inputs"),
        (negative_width, "half-widths not negative"),
    ],
)
def test_each_check_fails_for_a_closure_broken_in_its_way(breakage, check):
    assert not checks(breakage)[check].passed


def test_a_constant_rotational_part_passes_rotation_but_not_the_hemisphere():
    made = checks(unmirrored)
    assert made["rotation"].passed
    assert not made["reflection and hemisphere"].passed


def test_an_antisymmetric_part_that_is_not_neutral_is_found(monkeypatch):
    # A flux form that is no adjoint of the gradient makes variance out of advection.
    from learnclosure.validation import budget

    def one_sided(field, geometry):
        return (
            (np.roll(field, -1, -1) - field) / geometry.dx,
            (np.roll(field, -1, -2) - field) / geometry.dy,
        )

    monkeypatch.setattr(budget, "adjoint_gradient", one_sided)
    assert not checks()["antisymmetric part is neutral"].passed


# Frame changes of one tensor: K' = R K R^T, worked out by hand.
TENSOR = np.array([3000.0, -500.0, 900.0, 1000.0])


def test_a_tensor_turned_by_thirty_degrees():
    turned = transform_tensor(TENSOR, rotation(np.radians(30.0)))
    expected = [2326.794919, 266.025404, 1666.025404, 1673.205081]
    np.testing.assert_allclose(turned, expected, rtol=1e-9)
    assert 0.5 * (turned[2] - turned[1]) == pytest.approx(700.0, rel=1e-12)


def test_a_tensor_mirrored_changes_the_sign_of_its_antisymmetric_part():
    np.testing.assert_array_equal(
        transform_tensor(TENSOR, REFLECTION), [3000.0, 500.0, -900.0, 1000.0]
    )


def test_the_mirror_image_of_a_beta_plane_is_a_southern_beta_plane():
    # f = f0 + beta y with y' = -y and f' = -f: f0 changes sign, df'/dy' keeps it.
    north = {name: np.array([1.0]) for name in ROWS}
    south = transform_inputs(north, REFLECTION, ROWS)
    assert south["coriolis_parameter"] == [-1.0]
    assert south["planetary_beta_y"] == [1.0]
    assert south["planetary_beta_x"] == [-1.0]
    assert south["y_velocity"] == [-1.0]
    assert south["velocity_gradient_xy"] == [-1.0]
    assert south["velocity_gradient_yy"] == [1.0]


def test_the_time_step_limit_of_a_coarse_cell():
    # dt (Kxx/dx2 + Kyy/dy2) <= 1/2, K = 1e3: 28.94 d at 100 km, 2.5e4 s at 10 km.
    for side, step in ((100e3, 2.5e6), (10e3, 2.5e4)):
        width = np.full((1, 1), side)
        cell = Geometry(width, width, np.ones((1, 1, 1), bool), True, True)
        tensor = np.array([1e3, 0.0, 0.0, 1e3]).reshape(4, 1, 1, 1)
        assert stable_time_step(tensor, cell) == pytest.approx(step, rel=1e-12)


def test_an_explicit_step_at_the_limit_is_stable_and_beyond_it_is_not():
    # Spectral radius of forward Euler with the compact five-point form, from the matrix.
    side, count, diffusivity = 1e4, 8, 1e3
    ring = np.roll(np.eye(count), 1, axis=0) + np.roll(np.eye(count), -1, axis=0)
    second = np.kron(ring - 2 * np.eye(count), np.eye(count))
    second += np.kron(np.eye(count), ring - 2 * np.eye(count))
    width = np.full((1, 1), side)
    cell = Geometry(width, width, np.ones((1, 1, 1), bool), True, True)
    limit = stable_time_step(np.array([diffusivity, 0, 0, diffusivity]).reshape(4, 1, 1, 1), cell)
    for share, stable in ((1.0, True), (1.05, False)):
        step = np.eye(count**2) + share * limit * diffusivity / side**2 * second
        assert bool(np.abs(np.linalg.eigvalsh(step)).max() <= 1.0 + 1e-12) is stable


def test_the_variance_budget_is_the_sum_of_grad_c_s_grad_c_with_land_and_walls():
    random = np.random.default_rng(5)
    shape = (2, 9, 11)
    mask = random.uniform(size=shape) > 0.2
    geometry = Geometry(
        random.uniform(1e4, 2e4, shape[1:]), random.uniform(1e4, 2e4, shape[1:]), mask, True, False
    )
    tensor = np.array([2000.0, -900.0, 700.0, 800.0])[:, None, None, None] * np.where(mask, 1, 0)
    tracer = random.normal(size=shape)
    gx, gy = adjoint_gradient(tracer, geometry)
    area = np.where(mask, geometry.area, 0.0)
    expected = -(area * (2000.0 * gx**2 - 200.0 * gx * gy + 800.0 * gy**2)).sum()
    expected /= (area * (gx**2 + gy**2)).sum() * 1400.0
    symmetric, antisymmetric = variance_budget(tensor, geometry, tracer)
    assert symmetric == pytest.approx(expected, rel=1e-12)
    assert antisymmetric < 1e-13
