"""Which classical closures are scored, and what those told the truth can reach."""

from __future__ import annotations

import numpy as np
import pytest

from learnclosure.closures.table import table_from_statistics
from learnclosure.errors import StudyError
from learnclosure.study import ValidationSettings, parse_study
from learnclosure.validation.baseline_records import (
    BASELINES,
    BOUNDS,
    bound_record,
    tuned_constant,
)
from learnclosure.validation.scores import flux_scores
from learnclosure.validation.truth import flux_truth
from validation_cases import LAYERS, statistics

STUDY = '[[ensemble]]\nname = "north"\nfiles = "north/*.nc"\n[validation]\nbaselines = {}\n'


def test_a_study_scores_every_baseline_unless_it_names_some():
    assert set(ValidationSettings().baselines) == {*BASELINES, *BOUNDS}
    some = parse_study(STUDY.format('["stone", "bates-published"]'))
    assert some.validation.baselines == ("stone", "bates-published")


def test_a_baseline_nobody_knows_is_an_error():
    with pytest.raises(StudyError, match=r"validation\.baselines"):
        parse_study(STUDY.format('["wishful"]'))


def test_published_and_fitted_constants_are_reported_apart():
    published = {name for name in BASELINES if name.endswith("-published")}
    assert len(published) == 7
    assert {name.removesuffix("-published") for name in published} < set(BASELINES)
    assert "constant-published" not in BASELINES


def test_no_other_constant_explains_more_of_the_fluxes_than_the_tuned_one():
    truth = flux_truth(statistics("alpha", 3, noise=0.1, halves=False))
    best = tuned_constant(truth)

    def score(factor):
        k, zero = factor * best, 0.0 * best
        return np.array(flux_scores(np.stack([k, zero, zero, k]), truth)["flux_r2"])

    for factor in (0.7, 0.97, 1.03, 1.4):
        assert np.all(score(1.0) > score(factor))


def test_a_known_local_scalar_explains_the_fluxes_it_made():
    def tensor(data):
        k = 1000.0 + 500.0 * np.sin(np.arange(16.0)) * np.ones((LAYERS, 12, 16))
        return np.stack([k, 0.0 * k, 0.0 * k, k])

    data = statistics("alpha", 3, tensor=tensor, halves=False)
    data["scalar_diffusivity"] = data["transport_tensor_xx"]
    table = table_from_statistics([data])
    made = bound_record("local-scalar", table, None, {"alpha": flux_truth(data)}, {"alpha": data})
    assert made is not None
    assert made["family"] == "diagnosed"
    found = made["regions"]["alpha"]
    assert not found["out_of_sample"]
    np.testing.assert_allclose(found["scores"]["flux_r2"], 1.0, rtol=1e-12)
