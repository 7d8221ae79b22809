"""Selection finds what made the data; the evidence keeps test regions apart."""

from __future__ import annotations

import json
from functools import cache

import numpy as np
import pytest

from learnclosure.closures.closure import Closure
from learnclosure.closures.pointwise import on_model_axes
from learnclosure.closures.table import table_from_statistics
from learnclosure.errors import TrainingError
from learnclosure.features.inputs import compute_inputs
from learnclosure.features.mean_state import MeanState
from learnclosure.study import ClosureSettings, ValidationSettings
from learnclosure.validation import out_of_fold
from learnclosure.validation.baseline_records import BASELINES, BOUNDS
from learnclosure.validation.evaluation import evaluate
from learnclosure.validation.out_of_fold import Candidate
from learnclosure.validation.selection import CandidateScore, choose, select_closure
from validation_cases import COLUMNS, LAYERS, ROWS, statistics

SETTINGS = ClosureSettings(regressors=("histogram-boosting", "ridge"), targets=("linear",))
VALIDATION = ValidationSettings(folds=2, block_cells=4)
SHAPE = (LAYERS, ROWS, COLUMNS)


def prepared(data):
    """Features and local frame of every cell of a region."""
    arrays = {str(name): np.asarray(data[name].values) for name in data.variables}
    fields = compute_inputs(MeanState.from_mapping(arrays, dict(data.attrs)))
    inputs = {name: np.broadcast_to(values, SHAPE).ravel() for name, values in fields.items()}
    return Closure("mean-field", "ridge", "linear", SETTINGS).prepare(np, inputs)


@cache
def drivers():
    """Names of three features that vary, with their mean and spread in a reference region."""
    features = prepared(statistics("reference", 99)).features
    varied = []
    for name, values in features.items():
        flat = np.broadcast_to(values, int(np.prod(SHAPE)))
        if len(np.unique(flat)) > 100:
            varied.append((name, float(np.mean(flat)), float(np.std(flat))))
    return varied[:3]


def scores_of(data):
    made = prepared(data)
    return made, [
        np.clip((np.broadcast_to(made.features[name], int(np.prod(SHAPE))) - mean) / spread, -3, 3)
        for name, mean, spread in drivers()
    ]


def on_grid(made, nn, nt, tn, tt):
    return np.stack(
        [part.reshape(SHAPE) for part in on_model_axes(np, made.axes, (nn, nt, tn, tt))]
    )


def linear_truth(data):
    """Make a tensor linear in the features, in the local frame."""
    made, (a, b, c) = scores_of(data)
    return on_grid(made, 2000 + 300 * a, 150 * b - 200 * c, 150 * b + 200 * c, 1500 + 250 * b)


def stepped_truth(data):
    """Make a tensor that jumps where two features change sign together."""
    made, (a, b, c) = scores_of(data)
    jump = np.where(a * b > 0.0, 4000.0, 500.0)
    return on_grid(made, jump, 0 * c, 0 * c, 0.5 * jump)


@cache
def regions(truth, noise=0.1):
    return {
        name: statistics(name, seed, split=split, jet=jet, tensor=truth, noise=noise)
        for name, seed, split, jet in (
            ("alpha", 1, "train", 0.40),
            ("beta", 2, "train", 0.35),
            ("gamma", 3, "train", 0.45),
            ("delta", 4, "test", 0.42),
        )
    }


def trained(truth, settings=SETTINGS, only=None):
    data = {
        name: region
        for name, region in regions(truth).items()
        if region.attrs["split"] == "train" and (only is None or name in only)
    }
    table = table_from_statistics(list(data.values()))
    return select_closure(table, data, "mean-field", settings, VALIDATION)


@pytest.mark.parametrize(
    ("truth", "regressor"), [(linear_truth, "ridge"), (stepped_truth, "histogram-boosting")]
)
def test_the_kind_of_model_that_made_the_tensors_is_chosen(truth, regressor):
    closure, selection = trained(truth)
    assert selection.chosen == Candidate(regressor, "linear")
    assert (closure.regressor, closure.target) == (regressor, "linear")
    first, last = selection.scores
    assert first.flux_r2_mean > last.flux_r2_mean
    assert first.flux_r2_mean > 0.6
    assert selection.folds == ("region alpha", "region beta", "region gamma")


def test_training_twice_gives_the_same_closure_and_record():
    (one, first), (other, second) = trained(linear_truth), trained(linear_truth)
    assert first.as_record() == second.as_record()
    inputs = table_from_statistics([regions(linear_truth)["delta"]]).inputs
    np.testing.assert_array_equal(one.predict(inputs).tensor, other.predict(inputs).tensor)


def test_two_processes_give_the_same_as_one(monkeypatch):
    _, alone = trained(stepped_truth)
    monkeypatch.setattr(out_of_fold, "SMALL_TABLE", 0)
    _, together = trained(stepped_truth)
    assert alone.as_record() == together.as_record()


def test_half_widths_come_from_regions_left_out():
    closure, selection = trained(linear_truth)
    assert set(closure.half_widths_.by_region) == {"region alpha", "region beta", "region gamma"}
    for scores in selection.regions.values():
        assert min(scores["half_width_coverage"]["xx"]) > 0.5


def test_a_single_region_is_validated_by_strips():
    _, selection = trained(linear_truth, only=("alpha",))
    assert len(selection.folds) == VALIDATION.folds
    assert all("only one region" in label for label in selection.folds)
    assert list(selection.regions) == ["alpha"]


def scored(regressor, target, value):
    return CandidateScore(Candidate(regressor, target), [value], value)


def test_of_nearly_equal_candidates_the_simplest_is_taken():
    near = [
        scored("trees-and-mlp", "linear", 0.700),
        scored("extra-trees", "linear", 0.6985),
        scored("mlp", "log-cholesky", 0.6980),
        scored("mlp", "linear", 0.6975),
        scored("ridge", "linear", 0.6960),
    ]
    assert choose(near).candidate == Candidate("mlp", "linear")
    assert choose(near[:1]).candidate == Candidate("trees-and-mlp", "linear")


def test_candidates_without_any_score_are_refused():
    with pytest.raises(TrainingError, match=r"no candidate has a score .*found 1 candidates"):
        choose([scored("ridge", "linear", float("nan"))])


def evidence(data, truth=linear_truth):
    closure, selection = trained(truth)
    return evaluate(
        data, {"mean-field": closure}, {"mean-field": selection.as_record()}, SETTINGS, VALIDATION
    )


@pytest.fixture(scope="module")
def evaluation():
    return evidence(regions(linear_truth))


def test_the_evidence_has_the_promised_shape_and_is_plain_json(evaluation):
    assert json.loads(json.dumps(evaluation, allow_nan=False)) == evaluation
    family = evaluation["families"]["mean-field"]
    assert family["chosen"] == {"regressor": "ridge", "target": "linear"}
    assert set(family["folds"]) == {"random", "blocked", "region"}
    for scores in family["folds"].values():
        assert set(scores) == {"component_r2", "flux_r2", "divergence_r2"}
        assert len(scores["flux_r2"]) == LAYERS
    assert {name: made["split"] for name, made in family["regions"].items()} == {
        "alpha": "train",
        "beta": "train",
        "gamma": "train",
        "delta": "test",
    }
    assert set(family["regions"]["delta"]["scores"]) == {
        "flux_r2",
        "divergence_r2",
        "flux_r2_full",
        "divergence_r2_full",
        "component_r2",
        "amplitude_log_error",
        "half_width_coverage",
        "trust_mean",
    }
    # The invented statistics hold no local scalar.
    assert set(evaluation["baselines"]) == {*BASELINES, *BOUNDS} - {"local-scalar"}
    for name, made in evaluation["baselines"].items():
        bound = name in BOUNDS
        assert set(made["folds"]) == (set() if bound else {"random", "blocked", "region"})
        assert all(found["out_of_sample"] != bound for found in made["regions"].values())
        assert set(made["regions"]) == {"alpha", "beta", "gamma", "delta"}
    assert set(evaluation["ceiling"]) == {"alpha", "beta", "gamma", "delta"}
    assert evaluation["tracers_scored"] == "withheld"
    assert {"mean-field"} == set(evaluation["audit"])


def test_the_true_kind_of_model_beats_every_baseline_on_the_held_out_region(evaluation):
    learned = evaluation["families"]["mean-field"]["regions"]["delta"]["scores"]["flux_r2"]
    for made in evaluation["baselines"].values():
        baseline = made["regions"]["delta"]["scores"]["flux_r2"]
        assert all(a > b for a, b in zip(learned, baseline, strict=True))


def test_a_real_closure_passes_its_audit(evaluation):
    for check in evaluation["audit"]["mean-field"]:
        assert check["passed"], check


def test_the_truth_of_the_test_region_touches_nothing_but_its_own_scores(evaluation):
    data = dict(regions(linear_truth))
    data["delta"] = statistics("delta", 4, split="test", jet=0.42, tensor=stepped_truth, noise=0.1)
    changed = evidence(data)
    before, after = (made["families"]["mean-field"] for made in (evaluation, changed))
    assert before["regions"].pop("delta") != after["regions"].pop("delta")
    assert before == after
    assert evaluation["audit"] == changed["audit"]


def test_evidence_without_a_selection_is_refused():
    closure, _ = trained(linear_truth)
    with pytest.raises(TrainingError, match=r"family mean-field: how the closure was chosen"):
        evaluate(regions(linear_truth), {"mean-field": closure}, {}, SETTINGS, VALIDATION)
