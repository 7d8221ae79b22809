"""Targets: round trips, positive definiteness, and the mean a logarithm loses."""

from __future__ import annotations

import numpy as np
import pytest

from learnclosure.closures.targets import LinearTarget, LogCholeskyTarget, make_target
from learnclosure.errors import TrainingError


def tensors(count: int = 4000) -> tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Draw invented log-normal tensors of any orientation."""
    generator = np.random.default_rng(11)
    major = np.exp(7.0 + 0.6 * generator.normal(size=count))
    minor = major * generator.uniform(0.1, 1.0, count)
    angle = generator.uniform(0.0, np.pi, count)
    cosine, sine = np.cos(angle), np.sin(angle)
    return (
        major * cosine**2 + minor * sine**2,
        major * sine**2 + minor * cosine**2,
        (major - minor) * cosine * sine,
        400.0 * generator.normal(size=count),
    )


@pytest.mark.parametrize("name", ["linear", "log-cholesky"])
def test_what_is_encoded_decodes_to_itself_between_the_clipped_tails(name: str) -> None:
    parts = tensors()
    target = make_target(name).fit(*parts)
    columns = target.encode(*parts)
    decoded = target.decode(np, list(columns.T))
    low = (target.lowest - target.center) / target.spread + 1e-9
    high = (target.highest - target.center) / target.spread - 1e-9
    inside = np.all((columns > low) & (columns < high), axis=1)
    assert inside.mean() > 0.9
    for got, given in zip(decoded, parts, strict=True):
        np.testing.assert_allclose(got[inside], given[inside], rtol=1e-9, atol=1e-7)


@pytest.mark.parametrize("name", ["linear", "log-cholesky"])
def test_columns_are_clipped_and_standardised(name: str) -> None:
    parts = tensors()
    columns = make_target(name).fit(*parts).encode(*parts)
    assert columns.shape == (4000, 4)
    np.testing.assert_allclose(columns.mean(axis=0), 0.0, atol=1e-12)
    np.testing.assert_allclose(columns.std(axis=0), 1.0, rtol=1e-12)
    wild = [part * 1e6 for part in parts]
    assert np.abs(make_target(name).fit(*parts).encode(*wild)).max() < 10.0


def test_any_log_cholesky_prediction_is_positive_definite() -> None:
    target = LogCholeskyTarget().fit(*tensors())
    columns = np.random.default_rng(2).normal(scale=5.0, size=(2000, 4))
    nn, tt, nt, _ = target.decode(np, list(columns.T))
    assert np.all(nn > 0.0)
    assert np.all(nn * tt - nt * nt > 0.0)


def test_correction_gives_log_normal_diffusivities_their_mean_back() -> None:
    # For log-normal noise of standard deviation s the back-transformed mean of logarithms
    # is low by exp(-s^2 / 2) (Duan 1983, J. Am. Stat. Assoc. 78, 605-610).
    generator = np.random.default_rng(4)
    spread, count = 0.8, 200_000
    noise = spread * np.clip(generator.normal(size=count), -2.5, 2.5)
    diffusivity = 1000.0 * np.exp(noise)
    zero = np.zeros(count)
    target = LogCholeskyTarget().fit(diffusivity, diffusivity, zero, zero)
    constant = np.zeros((count, 4))  # the best constant prediction of standardised columns
    scale, weight = np.ones(count), np.ones(count)
    naive = 2.0 * target.decode(np, list(constant.T))[0].mean()
    assert naive / (2.0 * diffusivity.mean()) == pytest.approx(np.exp(-(spread**2) / 2), abs=0.02)
    target.correct_trace(constant, 2.0 * diffusivity, scale, weight)
    nn, tt, _, _ = target.decode(np, list(constant.T))
    assert (nn + tt).mean() == pytest.approx(2.0 * diffusivity.mean(), rel=1e-12)


def test_correction_leaves_the_antisymmetric_part_alone() -> None:
    parts = tensors()
    target = LogCholeskyTarget().fit(*parts)
    columns = target.encode(*parts)
    before = target.decode(np, list(columns.T))[3]
    ones = np.ones(len(columns))
    target.correct_trace(columns, 3.0 * (parts[0] + parts[1]), ones, ones)
    assert target.trace_factor > 2.0
    np.testing.assert_array_equal(target.decode(np, list(columns.T))[3], before)


def test_constant_columns_do_not_divide_by_zero() -> None:
    ones, zero = np.ones(50), np.zeros(50)
    columns = LinearTarget().fit(ones, ones, zero, zero).encode(ones, ones, zero, zero)
    assert np.all(columns == 0.0)


def test_a_tensor_without_positive_mean_has_no_logarithm() -> None:
    ones, zero = np.ones(50), np.zeros(50)
    with pytest.raises(TrainingError, match="no positive mean trace"):
        LogCholeskyTarget().fit(-ones, -ones, zero, zero)


def test_an_unknown_target_is_refused_by_name() -> None:
    with pytest.raises(TrainingError, match=r"no such target \(found 'eigen'"):
        make_target("eigen")
