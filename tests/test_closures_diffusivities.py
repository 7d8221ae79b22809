"""Formulas of classical closures against worked numbers, and what bounds them."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from closures_cases import invented_regions
from learnclosure.closures.baselines import BASELINES, Baseline
from learnclosure.closures.diffusivities import (
    LARGEST_DIFFUSIVITY,
    eady_visbeck_diffusivity,
    energy_bounded_diffusivity,
    held_larichev_diffusivity,
    relative_to_eddies,
    suppressed_diffusivity,
)
from learnclosure.closures.table import Table, table_from_statistics
from learnclosure.export.builder import GraphBuilder
from learnclosure.export.trace import Traced, TracingNamespace
from learnclosure.features.instability import EADY_FACTOR

EVERY = sorted(BASELINES)
RADIUS = 25464.790894703252
"""N H/(pi f) for N = 2e-3 s-1, H = 4000 m, f = 1e-4 s-1."""


@pytest.fixture(scope="module")
def table() -> Table:
    return table_from_statistics(invented_regions("local-energy"))


def test_stone_with_the_deformation_radius() -> None:
    # k = (f/sqrt Ri) L^2 of 2.5e-6 s-1 and R1 = 25464.8 m: 1621.1 (Stone 1972, constant of
    # order one from memory); with N H/f instead of R1 it is pi^2 times that, 16000.
    assert eady_visbeck_diffusivity(2.5e-6, RADIUS, 1.0) == pytest.approx(1621.1, abs=0.05)
    assert eady_visbeck_diffusivity(2.5e-6, np.pi * RADIUS, 1.0) == pytest.approx(16000.0)


def test_held_and_larichev_in_both_forms() -> None:
    # U = .02 m/s, R = 25464.8 m, beta = 2e-11: xi = 1.542, D = U^3/(beta^2 R^3) = 1211 (Held
    # and Larichev 1996, from memory).
    first = held_larichev_diffusivity(0.02, RADIUS, 2e-11, xp=np)
    assert first == pytest.approx(1211.0, rel=1e-3)
    # T^-3/beta^2 with T^-1 = 2.5e-6 s-1 is 39.06; so is U^3/(beta^2 R^3) for U = R/T.
    rate = 2.5e-6
    criticality = rate / (2e-11 * RADIUS)
    second = held_larichev_diffusivity(rate * RADIUS, RADIUS, 2e-11, xp=np)
    assert criticality > 1.0
    assert second == pytest.approx(rate**3 / (2e-11) ** 2, rel=1e-12)
    assert rate**3 / (2e-11) ** 2 == pytest.approx(39062.5)
    # Doubling U makes eight times as much, and below the critical shear there is nothing.
    doubled = held_larichev_diffusivity(0.04, RADIUS, 2e-11, xp=np)
    assert doubled == pytest.approx(8.0 * first, rel=1e-12)
    assert held_larichev_diffusivity(0.01, RADIUS, 2e-11, xp=np) == 0.0


@pytest.mark.parametrize(
    ("relative", "expected"), [(0.0, 3456.0), (0.05, 3055.76), (0.1, 2267.84), (0.2, 1116.39)]
)
def test_suppression_by_the_mean_flow(relative: float, expected: float) -> None:
    # Ferrari and Nikurashin 2010 (form from memory): EKE = .01, memory 4 d, 300 km.
    found = suppressed_diffusivity(0.01, 1 / (4 * 86400), 2 * np.pi / 300e3, relative)
    assert found == pytest.approx(expected, abs=0.005)


@pytest.mark.parametrize("turning", [0.0, 2.5e-6, -1e-5])
def test_suppression_is_the_diffusivity_of_a_spinning_velocity(turning: float) -> None:
    # An Ornstein-Uhlenbeck velocity that turns has S = u^2 T/(1 + (Omega T)^2): 1600 m2/s
    # for u = .1, T = 2e5, Omega = 2.5e-6 (Taylor 1921).
    memory = 2e5
    exact = 0.1**2 * memory / (1.0 + (turning * memory) ** 2)
    found = suppressed_diffusivity(0.01, 1.0 / memory, turning, 1.0)
    assert found == pytest.approx(exact, rel=1e-12)


def test_the_energy_bound_of_a_worked_column() -> None:
    # N E/M^2 = 4000 for N = 2e-3, M^2 = 5e-9, E = .01, and 400 at .1 (Marshall et al. 2012).
    inverse_time = 5e-9 / 2e-3
    assert energy_bounded_diffusivity(0.01, inverse_time, 1.0, xp=np) == pytest.approx(4000.0)
    assert energy_bounded_diffusivity(0.01, inverse_time, 0.1, xp=np) == pytest.approx(400.0)


@given(st.integers(0, 10_000), st.integers(2, 40), st.floats(1e-4, 1e-2), st.floats(1e-9, 1e-7))
@settings(max_examples=50, derandomize=True, deadline=None)
def test_no_sample_of_eddies_carries_more_buoyancy_than_the_bound(
    seed: int, members: int, frequency: float, gradient: float
) -> None:
    # |<u'b'>| <= N E with E = <|u'|^2>/2 + <b'^2>/(2 N^2), same weights in all moments
    # (Cauchy-Schwarz; Marshall et al. 2012).
    random = np.random.default_rng(seed)
    u, v, b = random.normal(size=(3, members)) * random.uniform(1e-3, 1.0, (3, 1))
    b = (b + u * random.normal()) * frequency
    u, v, b = (values - values.mean() for values in (u, v, b))
    energy = 0.5 * np.mean(u * u + v * v) + 0.5 * np.mean(b * b) / frequency**2
    coefficient = np.hypot(np.mean(u * b), np.mean(v * b)) / gradient
    bound = energy_bounded_diffusivity(energy, gradient / frequency, 1.0, xp=np)
    assert coefficient <= bound * (1.0 + 1e-12)


def test_eddies_drift_with_the_column_and_westward() -> None:
    # c = U_column - beta Ld^2 along x: U - c = .3 - .1 + 2e-11 x (30 km)^2 = .218 m/s.
    inputs = {
        "x_velocity": 0.3, "y_velocity": 0.0, "column_velocity_x": 0.1,
        "column_velocity_y": 0.0, "deformation_radius": 30e3, "planetary_beta_x": 0.0,
        "planetary_beta_y": 2e-11,
    }  # fmt: skip
    along_x, along_y = relative_to_eddies(inputs)
    assert along_x == pytest.approx(0.218)
    assert along_y == pytest.approx(0.0)


def unit(name: str, **inputs: float) -> float:
    baseline = BASELINES[name](published=True)
    baseline.layers_ = np.array([0.0])
    baseline.constants_ = np.array([baseline.published_constant])
    values = {key: np.array([value]) for key, value in {"layer_index": 0.0, **inputs}.items()}
    return float(baseline.diffusivity(np, values)[0])


def test_the_estimators_carry_the_published_constants() -> None:
    growth = {"eady_growth_rate": EADY_FACTOR * 2.5e-6}
    place = {"planetary_beta_x": 0.0, "planetary_beta_y": 2e-11, "deformation_radius": RADIUS}
    still = dict.fromkeys(
        ("x_velocity", "y_velocity", "column_velocity_x", "column_velocity_y"), 0.0
    )
    drift = 2e-11 * RADIUS**2
    assert unit("eady-visbeck", jet_width=100e3, **growth) == pytest.approx(375.0)
    assert unit("stone", **growth, **place) == pytest.approx(1621.1, abs=0.05)
    assert unit("held-larichev", **growth, **place) == pytest.approx(39062.5)
    energy = {"eddy_kinetic_energy": 0.01, "eddy_kinetic_energy_column": 0.01}
    speed = np.sqrt(0.02)
    assert unit("eke-mixing-length", **energy, **place) == pytest.approx(0.35 * speed * RADIUS)
    suppressed = 1.0 / (1.0 + 4.0 * drift**2 / speed**2)
    assert unit("bates", **energy, **place, **still) == pytest.approx(
        0.35 * speed * RADIUS * suppressed
    )
    turning = drift / RADIUS * 4 * 86400
    assert unit("ferrari-nikurashin", **energy, **place, **still) == pytest.approx(
        3456.0 / (1.0 + turning**2)
    )
    assert unit("energy-bounded", **energy, **growth) == pytest.approx(400.0)


@pytest.mark.parametrize("name", EVERY)
def test_every_baseline_recovers_the_constants_of_its_own_law(name: str, table: Table) -> None:
    kind: type[Baseline] = BASELINES[name]
    law = kind().fit(table)
    law.constants_ = np.array([0.8, 0.2])
    truth = np.column_stack([np.broadcast_to(v, len(table)) for v in law.tensor(np, table.inputs)])
    own = type(table)(**{**table.__dict__, "tensor": truth})
    np.testing.assert_allclose(kind().fit(own).constants_, [0.8, 0.2], rtol=1e-12)


@pytest.mark.parametrize("name", EVERY)
def test_every_baseline_is_finite_and_positive_on_inputs_that_lack_something(
    name: str, table: Table
) -> None:
    baseline = BASELINES[name]().fit(table)
    baseline.constants_ = np.ones(2)
    for gone in (*baseline.required, "everything"):
        inputs = {
            key: 0.0 * values if key == gone or gone == "everything" else values
            for key, values in table.inputs.items()
        }
        found = baseline.diffusivity(np, inputs)
        assert np.isfinite(found).all()
        assert np.all(found >= 0.0)
        if name in ("held-larichev", "energy-bounded"):
            assert np.all(found <= LARGEST_DIFFUSIVITY)


@pytest.mark.parametrize("name", EVERY)
def test_every_baseline_runs_in_the_graph(name: str, table: Table) -> None:
    from onnxruntime import InferenceSession

    baseline = BASELINES[name]().fit(table)
    builder = GraphBuilder()
    traced = {key: Traced(builder, builder.input(key)) for key in baseline.required}
    value = baseline.diffusivity(TracingNamespace(builder), traced)
    builder.output("diffusivity", value.name)
    model = builder.model("test", "", {})
    session = InferenceSession(model.SerializeToString(), providers=["CPUExecutionProvider"])
    feed = {v.name: table.inputs[v.name][:, None] for v in session.get_inputs()}
    plain = baseline.diffusivity(np, table.inputs)
    np.testing.assert_allclose(session.run(None, feed)[0][:, 0], plain, rtol=1e-14)
