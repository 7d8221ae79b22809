"""No point is ever both trained on and scored, and nothing is left empty."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from learnclosure.errors import TrainingError
from learnclosure.validation.folds import (
    Fold,
    blocked_folds,
    check_folds,
    make_folds,
    random_folds,
    region_folds,
)

quiet = settings(max_examples=25, deadline=None, derandomize=True)


def two_regions(rows=12, columns=16, layers=2):
    layer, row, column = (
        part.ravel() for part in np.indices((layers, rows, columns)).astype(np.int64)
    )
    region = np.repeat(np.array(["east", "west"]), layer.size)
    return region, np.tile(layer, 2), np.tile(row, 2), np.tile(column, 2)


def every_point_once(folds, size):
    return np.array_equal(np.sort(np.concatenate([fold.test for fold in folds])), np.arange(size))


@quiet
@given(st.integers(2, 200), st.integers(2, 7), st.integers(0, 5))
def test_random_folds_partition_the_points(size, number, seed):
    if size < number:
        with pytest.raises(TrainingError, match="there is nothing to score"):
            random_folds(size, number, seed)
        return
    folds = random_folds(size, number, seed)
    assert every_point_once(folds, size)
    for fold in folds:
        assert np.array_equal(np.sort(np.r_[fold.train, fold.test]), np.arange(size))
    sizes = [fold.test.size for fold in folds]
    assert max(sizes) - min(sizes) <= 1


@quiet
@given(st.integers(2, 4), st.integers(4, 6), st.integers(0, 1), st.integers(0, 5))
def test_blocks_stay_whole_through_all_layers_and_keep_their_distance(
    number, side, buffer_cells, seed
):
    region, _, row, column = two_regions()
    folds = blocked_folds(
        region,
        row,
        column,
        folds=number,
        block_cells=side,
        seed=seed,
        buffer_cells=buffer_cells,
    )
    assert every_point_once(folds, region.size)
    block = np.array(
        [f"{r} {y // side} {x // side}" for r, y, x in zip(region, row, column, strict=True)]
    )
    for fold in folds:
        assert not set(block[fold.train]) & set(block[fold.test])
        for code in ("east", "west"):
            scored = fold.test[region[fold.test] == code]
            trained = fold.train[region[fold.train] == code]
            gap = np.maximum(
                np.abs(row[trained][:, None] - row[scored]),
                np.abs(column[trained][:, None] - column[scored]),
            )
            assert gap.size == 0 or gap.min() > buffer_cells


def test_without_a_buffer_every_point_not_scored_is_trained_on():
    region, _, row, column = two_regions()
    for fold in blocked_folds(region, row, column, folds=3, block_cells=4, seed=1):
        assert fold.train.size + fold.test.size == region.size


def test_region_folds_leave_each_region_out_in_turn():
    region, _, _, column = two_regions()
    folds = region_folds(region, column)
    assert [fold.label for fold in folds] == ["region east", "region west"]
    for fold in folds:
        assert len(set(region[fold.test])) == 1
        assert not set(region[fold.test]) & set(region[fold.train])


def test_one_region_is_cut_into_strips_of_whole_columns_and_the_label_says_so():
    region, _, _, column = two_regions()
    west = region == "west"
    folds = region_folds(region[west], column[west])
    assert len(folds) == 4
    assert all("only one region" in fold.label for fold in folds)
    assert every_point_once(folds, int(west.sum()))
    for fold in folds:
        scored = column[west][fold.test]
        assert not set(column[west][fold.train]) & set(scored)
        assert np.ptp(scored) == 3


def test_a_region_too_narrow_for_strips_is_refused():
    with pytest.raises(TrainingError, match=r"nothing to score .*use fewer folds"):
        region_folds(np.array(["a"] * 3), np.arange(3))


def test_blocks_larger_than_the_region_are_halved_until_every_fold_has_one():
    region, _, row, column = two_regions()
    folds = blocked_folds(region, row, column, folds=3, block_cells=64, seed=0)
    assert len(folds) == 3
    assert all(fold.test.size for fold in folds)


def test_a_region_with_fewer_cells_than_folds_is_refused():
    few = np.zeros(4, dtype=int)
    with pytest.raises(TrainingError, match=r"fold 'blocks \d'.*use fewer folds"):
        blocked_folds(few, np.array([0, 0, 1, 1]), np.array([0, 1, 0, 1]), folds=5,
                      block_cells=8, seed=0)  # fmt: skip


@pytest.mark.parametrize(
    ("folds", "message"),
    [
        ([Fold(np.array([0, 1]), np.array([1, 2]), "leaky")], "both trained on and scored"),
        (
            [
                Fold(np.array([0]), np.array([1, 2]), "one"),
                Fold(np.array([0]), np.array([2]), "two"),
            ],
            "scored by more than one fold",
        ),
        ([Fold(np.array([], int), np.array([1]), "bare")], "nothing to train on"),
        ([Fold(np.array([0]), np.array([3]), "far")], "outside the table"),
    ],
)
def test_unsound_folds_are_refused(folds, message):
    with pytest.raises(TrainingError, match=message):
        check_folds(folds, 3)


@pytest.mark.parametrize("kind", ["random", "blocked", "region"])
def test_the_same_seed_makes_the_same_folds(kind):
    region, _, row, column = two_regions()
    first, second = (
        make_folds(kind, region, row, column, folds=3, block_cells=4, seed=9) for _ in range(2)
    )
    for one, other in zip(first, second, strict=True):
        assert one.label == other.label
        assert np.array_equal(one.test, other.test)
        assert np.array_equal(one.train, other.train)
