"""Classical closures against published numbers, and what fitting them means."""

from __future__ import annotations

import numpy as np
import pytest

from closures_cases import invented_regions
from learnclosure.closures.baselines import (
    ConstantPerLayer,
    EadyVisbeck,
    EkeMixingLength,
    eady_visbeck_diffusivity,
    mixing_length_diffusivity,
)
from learnclosure.closures.table import Table, table_from_statistics
from learnclosure.errors import TrainingError
from learnclosure.features.instability import EADY_FACTOR


@pytest.fixture(scope="module")
def table() -> Table:
    return table_from_statistics(invented_regions("mean-field"))


def test_eady_visbeck_worked_number() -> None:
    # Visbeck et al. 1997: 0.015 multiplies f/sqrt(Ri), not the Eady rate of 0.31 f/sqrt(Ri).
    assert eady_visbeck_diffusivity(2.5e-6, 100e3, 0.015) == pytest.approx(375.0, rel=1e-12)


def test_eady_visbeck_takes_the_growth_rate_without_its_factor() -> None:
    baseline = EadyVisbeck(published=True)
    baseline.layers_, baseline.constants_ = np.array([0.0]), np.array([0.015])
    inputs = {
        "layer_index": np.array([0.0]),
        "eady_growth_rate": np.array([EADY_FACTOR * 2.5e-6]),
        "jet_width": np.array([100e3]),
    }
    assert baseline.diffusivity(np, inputs)[0] == pytest.approx(375.0, rel=1e-12)


@pytest.mark.parametrize(
    ("relative_speed", "expected"),
    [(0.0, 1484.92), (0.05, 989.95), (0.1, 494.97), (0.2, 164.99)],
)
def test_mixing_length_worked_numbers(relative_speed: float, expected: float) -> None:
    # Form of Bates et al. 2014 with Gamma = 0.35, b1 = 4 (constants from memory);
    # eddy speed sqrt(2 * 0.01) m/s, length 30 km.
    got = mixing_length_diffusivity(np.sqrt(0.02), 30e3, relative_speed)
    assert got == pytest.approx(expected, abs=0.005)


def test_still_water_mixes_nothing() -> None:
    assert mixing_length_diffusivity(np.zeros(2), 30e3, np.array([0.0, 0.1])).tolist() == [0, 0]


def test_constant_is_the_weighted_mean_of_half_the_trace(table: Table) -> None:
    baseline = ConstantPerLayer().fit(table)
    half_trace = 0.5 * (table.tensor[:, 0] + table.tensor[:, 3])
    for layer in (0, 1):
        chosen = table.layer == layer
        mean = np.average(half_trace[chosen], weights=table.weight[chosen])
        assert baseline.constants_[layer] == pytest.approx(mean)
        assert baseline.diffusivity(np, table.inputs)[chosen] == pytest.approx(mean)


@pytest.mark.parametrize("kind", [EadyVisbeck, EkeMixingLength])
def test_fitting_recovers_the_constants_of_its_own_law(
    kind: type[EadyVisbeck | EkeMixingLength], table: Table
) -> None:
    baseline = kind().fit(table)
    baseline.constants_ = np.array([0.8, 0.2])
    truth = np.column_stack(baseline.tensor(np, table.inputs))
    own = table.select(np.arange(len(table)))
    own = type(own)(**{**own.__dict__, "tensor": truth})
    np.testing.assert_allclose(kind().fit(own).constants_, [0.8, 0.2], rtol=1e-12)


@pytest.mark.parametrize("kind", [EadyVisbeck, EkeMixingLength])
def test_published_constants_are_not_fitted(
    kind: type[EadyVisbeck | EkeMixingLength], table: Table
) -> None:
    baseline = kind(published=True).fit(table)
    assert np.all(baseline.constants_ == kind.published_constant)
    assert baseline.parameters()["published"] is True
    xx, xy, yx, yy = baseline.tensor(np, table.inputs)
    assert np.all(xx >= 0.0)
    assert np.array_equal(xx, yy)
    assert not np.any(xy)
    assert not np.any(yx)


def test_a_layer_not_trained_on_takes_the_nearest_constant(table: Table) -> None:
    baseline = ConstantPerLayer().fit(table)
    index = np.array([-1.0, 0.0, 1.0, 5.0])
    got = baseline.diffusivity(np, {"layer_index": index})
    np.testing.assert_array_equal(got, baseline.constants_[[0, 0, 1, 1]])


def test_a_constant_has_no_published_value() -> None:
    with pytest.raises(TrainingError, match="no published constant"):
        ConstantPerLayer(published=True)


def test_a_missing_input_is_named(table: Table) -> None:
    inputs = {k: v for k, v in table.inputs.items() if k != "eddy_kinetic_energy"}
    bare = type(table)(**{**table.__dict__, "inputs": inputs})
    with pytest.raises(TrainingError, match="needs the input eddy_kinetic_energy"):
        EkeMixingLength().fit(bare)
