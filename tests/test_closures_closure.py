"""A closure learns a known law, obeys its bounds and refuses what it cannot use."""

from __future__ import annotations

import pickle
from itertools import product

import numpy as np
import pytest

from closures_cases import invented_regions, mean_state, with_known_law
from learnclosure.closures.closure import Closure, true_frame_components
from learnclosure.closures.intervals import calibrate_half_widths
from learnclosure.closures.pointwise import UNBOUNDED, half_widths_on_axes
from learnclosure.closures.table import Table, table_from_statistics
from learnclosure.errors import InputError, TrainingError
from learnclosure.study import ClosureSettings

SETTINGS = ClosureSettings()
FAMILIES = ("mean-field", "local-energy")


@pytest.fixture(scope="module")
def tables() -> dict[str, Table]:
    return {family: table_from_statistics(invented_regions(family)) for family in FAMILIES}


def r2(predicted: np.ndarray, true: np.ndarray) -> float:
    """Share of the variance of all components explained."""
    return float(1.0 - np.sum((predicted - true) ** 2) / np.sum((true - true.mean(axis=0)) ** 2))


def noiseless(family: str) -> Table:
    """Return the third region without noise."""
    return table_from_statistics([with_known_law(mean_state("cedar", 0.36, 75e3, 400.0), family)])


@pytest.mark.parametrize(
    ("family", "regressor", "target"),
    [
        *product(FAMILIES, ("extra-trees", "mlp"), ("linear", "log-cholesky")),
        ("mean-field", "histogram-boosting", "linear"),
        ("local-energy", "trees-and-mlp", "linear"),
    ],
)
def test_recovers_a_known_law_in_a_region_left_out(
    tables: dict[str, Table], family: str, regressor: str, target: str
) -> None:
    table = tables[family]
    closure = Closure(family, regressor, target, SETTINGS)
    closure.fit(table.select(table.region != "cedar"))
    truth = noiseless(family)
    assert r2(closure.predict(truth.inputs).tensor, truth.tensor) > 0.9


def test_ridge_explains_part_of_the_law(tables: dict[str, Table]) -> None:
    table = tables["mean-field"]
    closure = Closure("mean-field", "ridge", "linear", SETTINGS)
    closure.fit(table.select(table.region != "cedar"))
    truth = noiseless("mean-field")
    assert 0.5 < r2(closure.predict(truth.inputs).tensor, truth.tensor) < 1.0


def fitted(table: Table, family: str = "local-energy", target: str = "linear") -> Closure:
    return Closure(family, "ridge", target, SETTINGS).fit(table)


@pytest.mark.parametrize("target", ["linear", "log-cholesky"])
@pytest.mark.parametrize("family", FAMILIES)
def test_predictions_are_bounded_wherever_they_are_asked_for(
    tables: dict[str, Table], family: str, target: str
) -> None:
    closure = fitted(tables[family], family, target)
    random = np.random.default_rng(0)
    inputs = {
        name: values * np.exp(random.normal(scale=2.0, size=len(values)))
        for name, values in tables[family].inputs.items()
    }
    prediction = closure.predict(inputs)
    xx, xy, yx, yy = prediction.tensor.T
    shear = 0.5 * (xy + yx)
    radius = np.hypot(0.5 * (xx - yy), shear)
    assert np.all(0.5 * (xx + yy) - radius >= SETTINGS.floor * (1.0 - 1e-9))
    assert np.all(0.5 * (xx + yy) + radius <= SETTINGS.cap * (1.0 + 1e-9))
    assert np.all(np.abs(yx - xy) <= 2.0 * SETTINGS.cap * (1.0 + 1e-9))
    assert prediction.trust.min() < 0.5 < prediction.trust.max()


def test_without_trust_only_the_fallback_is_left(tables: dict[str, Table]) -> None:
    table = tables["local-energy"]
    closure = fitted(table)
    inputs = {name: values.copy() for name, values in table.inputs.items()}
    inputs["velocity_gradient_xy"] = inputs["velocity_gradient_xy"] + 1e-2
    prediction = closure.predict(inputs)
    assert np.all(prediction.trust == 0.0)
    fallback = np.clip(closure.fallback_.diffusivity(np, inputs), SETTINGS.floor, SETTINGS.cap)
    np.testing.assert_allclose(prediction.tensor[:, 0], fallback, rtol=1e-12)
    np.testing.assert_allclose(prediction.tensor[:, 3], fallback, rtol=1e-12)
    np.testing.assert_allclose(prediction.tensor[:, 1:3], 0.0, atol=1e-9)


def test_half_widths_cover_the_training_regions_on_model_axes(tables: dict[str, Table]) -> None:
    table = tables["local-energy"]
    guess = np.empty((len(table), 4))
    for region in table.regions:
        left_out = table.region == region
        closure = fitted(table.select(~left_out))
        guess[left_out] = closure.predict_frame(table.select(left_out).inputs)
    closure = fitted(table)
    truth = true_frame_components(table, closure.prepare(np, table.inputs).axes)
    half_widths = calibrate_half_widths(guess, truth, table.region, 0.1, SETTINGS.floor)
    assert np.all(closure.predict(table.inputs).half_width == UNBOUNDED)
    prediction = closure.set_half_widths(half_widths).predict(table.inputs)
    inside = np.abs(prediction.tensor - table.tensor) <= prediction.half_width
    for region in table.regions:
        assert np.all(inside[table.region == region].mean(axis=0) >= 0.9)


def test_interval_arithmetic_contains_every_tensor_of_the_box() -> None:
    random = np.random.default_rng(0)
    angle = random.uniform(0.0, 2.0 * np.pi, 500)

    class Axes:
        nx, ny, tx, ty = np.cos(angle), np.sin(angle), -np.sin(angle), np.cos(angle)

    ones = np.full(500, 950.0)
    multipliers = np.array([0.3, 0.2, 0.1, 0.5])
    widths = half_widths_on_axes(np, Axes, (ones, 0 * ones, 0 * ones, ones), multipliers, 50.0)
    box = 1000.0 * multipliers * random.choice([-1.0, 1.0], size=(500, 4))
    frame = box.reshape(-1, 2, 2)
    rotation = np.stack(
        [np.stack([Axes.nx, Axes.tx], axis=-1), np.stack([Axes.ny, Axes.ty], axis=-1)], axis=-2
    )
    turned = rotation @ frame @ np.swapaxes(rotation, -1, -2)
    limit = np.stack(widths, axis=-1).reshape(-1, 2, 2)
    assert np.all(np.abs(turned) <= limit * (1.0 + 1e-12))
    assert (np.abs(turned) / limit).max() > 0.99


def test_the_corrected_trace_has_the_true_area_mean_out_of_sample(
    tables: dict[str, Table],
) -> None:
    table = tables["mean-field"]
    closure = Closure("mean-field", "ridge", "log-cholesky", SETTINGS)
    closure.fit(table.select(table.region != "cedar"))
    rest = table.select(table.region == "cedar")
    trace = [
        np.average(tensor[:, 0] + tensor[:, 3], weights=rest.weight)
        for tensor in (closure.predict(rest.inputs).tensor, rest.tensor)
    ]
    assert trace[0] == pytest.approx(trace[1], rel=0.05)


def test_a_mean_reuses_parts_fitted_to_the_same_points(tables: dict[str, Table]) -> None:
    table = tables["mean-field"].select(np.arange(0, len(tables["mean-field"]), 6))
    for target in ("linear", "log-cholesky"):
        parts = [
            Closure("mean-field", name, target, SETTINGS).fit(table)
            for name in ("extra-trees", "mlp")
        ]
        quick = Closure("mean-field", "trees-and-mlp", target, SETTINGS).fit(table, reuse=parts)
        assert quick.regressor_.parts_[0] is parts[0].regressor_
        whole = Closure("mean-field", "trees-and-mlp", target, SETTINGS).fit(table)
        np.testing.assert_array_equal(
            quick.predict(table.inputs).tensor, whole.predict(table.inputs).tensor
        )


def test_parts_of_other_points_are_not_reused(tables: dict[str, Table]) -> None:
    table = tables["mean-field"].select(np.arange(0, len(tables["mean-field"]), 6))
    other = [
        Closure("mean-field", name, "linear", SETTINGS).fit(table.select(table.region == "birch"))
        for name in ("extra-trees", "mlp")
    ]
    closure = Closure("mean-field", "trees-and-mlp", "linear", SETTINGS).fit(table, reuse=other)
    assert closure.regressor_.parts_[0] is not other[0].regressor_


def test_a_pickled_closure_predicts_the_same_without_its_training_sample(
    tables: dict[str, Table],
) -> None:
    closure = fitted(tables["local-energy"])
    text = pickle.dumps(closure)
    assert len(text) < tables["local-energy"].tensor.nbytes
    copy = pickle.loads(text)
    inputs = tables["local-energy"].inputs
    np.testing.assert_array_equal(copy.predict(inputs).tensor, closure.predict(inputs).tensor)


def test_mean_field_closures_ask_for_no_eddy_energy(tables: dict[str, Table]) -> None:
    closure = fitted(tables["mean-field"], "mean-field")
    assert not any("energy" in name for name in closure.inputs_)
    assert any("energy" in name for name in fitted(tables["local-energy"]).inputs_)


def test_every_named_input_matters_and_no_other_is_read(tables: dict[str, Table]) -> None:
    table = tables["local-energy"]
    closure = fitted(table)
    needed = {name: table.inputs[name] for name in closure.inputs_}
    np.testing.assert_array_equal(
        closure.predict(needed).tensor, closure.predict(table.inputs).tensor
    )


def test_wrong_inputs_are_named(tables: dict[str, Table]) -> None:
    table = tables["mean-field"]
    closure = fitted(table, "mean-field")
    name = closure.inputs_[3]
    missing = {key: values for key, values in table.inputs.items() if key != name}
    with pytest.raises(InputError, match=f"{name}: a closure input is missing"):
        closure.predict(missing)
    short = {**table.inputs, name: table.inputs[name][:-1]}
    with pytest.raises(InputError, match=f"{name}: a closure input has the wrong shape"):
        closure.predict(short)
    hole = table.inputs[name].copy()
    hole[7] = np.nan
    with pytest.raises(InputError, match=rf"{name}: .* not finite \(found 1 of"):
        closure.predict({**table.inputs, name: hole})


def test_a_region_without_eddy_energy_cannot_train_the_energy_family(
    tables: dict[str, Table],
) -> None:
    table = tables["mean-field"]
    inputs = {key: values for key, values in table.inputs.items() if "energy" not in key}
    bare = type(table)(**{**table.__dict__, "inputs": inputs})
    with pytest.raises(TrainingError, match="family local-energy: the regions lack the input"):
        Closure("local-energy", "ridge", "linear", SETTINGS).fit(bare)


def test_too_few_points_and_unknown_families_are_refused(tables: dict[str, Table]) -> None:
    few = tables["mean-field"].select(np.arange(10))
    with pytest.raises(TrainingError, match=r"too few points to train on \(found 10"):
        Closure("mean-field", "ridge", "linear", SETTINGS).fit(few)
    with pytest.raises(TrainingError, match=r"no such family \(found 'domain'"):
        Closure("domain", "ridge", "linear", SETTINGS)
