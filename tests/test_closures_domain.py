"""Trust: one inside, falling linearly outside, added up over features."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from learnclosure.closures.domain import RangeGuard
from learnclosure.errors import TrainingError


def guard() -> RangeGuard:
    generator = np.random.default_rng(0)
    return RangeGuard().fit(
        {"speed": generator.uniform(0.0, 1.0, 5000), "radius": generator.uniform(3e4, 4e4, 5000)}
    )


def test_trained_points_are_trusted_fully() -> None:
    g = guard()
    inside = {"speed": np.linspace(0.01, 0.99, 50), "radius": np.linspace(3.01e4, 3.99e4, 50)}
    assert np.all(g.trust(np, inside) == 1.0)


def test_trust_falls_linearly_over_one_margin() -> None:
    g = guard()
    share = np.array([0.0, 0.25, 0.5, 1.0, 1.5])
    features = {
        "speed": g.upper[0] + share * g.margin[0],
        "radius": np.full(5, 3.5e4),
    }
    expected = np.maximum(1.0 - share, 0.0)
    np.testing.assert_allclose(g.trust(np, features), expected, atol=1e-12)


def test_excesses_of_several_features_add_up() -> None:
    g = guard()
    features = {
        "speed": np.array([g.upper[0] + 0.3 * g.margin[0]]),
        "radius": np.array([g.lower[1] - 0.5 * g.margin[1]]),
    }
    assert g.trust(np, features)[0] == pytest.approx(0.2)


@settings(derandomize=True, max_examples=100, deadline=None)
@given(st.floats(-1e12, 1e12), st.floats(-1e12, 1e12))
def test_trust_lies_between_zero_and_one(speed: float, radius: float) -> None:
    value = guard_once.trust(np, {"speed": np.array([speed]), "radius": np.array([radius])})
    assert 0.0 <= value[0] <= 1.0


guard_once = guard()


def test_a_feature_that_never_varied_still_has_a_margin() -> None:
    g = RangeGuard().fit({"zero": np.zeros(10), "five": np.full(10, 5.0)})
    assert np.all(g.margin > 0.0)
    assert g.ranges() == {"zero": (-1.0, 1.0), "five": (3.75, 6.25)}


def test_no_point_means_no_range() -> None:
    with pytest.raises(TrainingError, match="no point to learn a trained range from"):
        RangeGuard().fit({"speed": np.zeros(0)})
