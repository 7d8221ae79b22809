"""Ways of splitting a table of points into parts to train on and parts to score.

Neighbouring cells share their eddies, so random folds flatter every method; blocks
and whole regions tell what a closure is worth elsewhere (Roberts et al. 2017,
Ecography 40, 913-929). All three are scored side by side.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
import numpy.typing as npt

from learnclosure.errors import TrainingError

IntArray = npt.NDArray[np.int64]
FoldKind = Literal["random", "blocked", "region"]


@dataclass(frozen=True)
class Fold:
    """One split of a table.

    Attributes
    ----------
    train, test : ndarray of int, shape (point,)
        Indices of the points to fit on and to score, ascending.
    label : str
        What is left out, in words.
    """

    train: IntArray
    test: IntArray
    label: str


def _fold(train: npt.NDArray[np.bool_], test: npt.NDArray[np.bool_], label: str) -> Fold:
    return Fold(np.flatnonzero(train), np.flatnonzero(test), label)


def check_folds(folds: Sequence[Fold], size: int) -> list[Fold]:
    """Return the folds if they are sound.

    Parameters
    ----------
    folds : sequence of Fold
    size : int
        Number of points of the table.

    Returns
    -------
    list of Fold

    Raises
    ------
    TrainingError
        If a fold has nothing to train on or to score, trains on a point it scores, names
        a point outside the table, or if a point is scored twice.
    """
    scored = np.zeros(size, dtype=np.int64)
    for fold in folds:
        where = f"fold {fold.label!r}"
        for part, points in (("train on", fold.train), ("score", fold.test)):
            if points.size == 0:
                raise TrainingError(
                    f"there is nothing to {part}",
                    where=where,
                    found=f"{size} points in the table",
                    remedy="use fewer folds, smaller blocks, or more and larger regions",
                )
            if points.min() < 0 or points.max() >= size:
                raise TrainingError(
                    "a point outside the table is named", where=where, expected=f"0 to {size - 1}"
                )
        shared = np.intersect1d(fold.train, fold.test).size
        if shared:
            raise TrainingError(
                "points are both trained on and scored",
                where=where,
                found=f"{shared} shared points",
                expected="none",
            )
        np.add.at(scored, fold.test, 1)
    if (scored > 1).any():
        raise TrainingError(
            "points are scored by more than one fold",
            found=f"{int((scored > 1).sum())} such points",
            expected="none",
        )
    return list(folds)


def random_folds(size: int, folds: int, seed: int) -> list[Fold]:
    """Deal single points out at random: what a closure interpolates between neighbours.

    Parameters
    ----------
    size : int
        Number of points.
    folds : int
        Number of folds, at least 2; their sizes differ by one at most.
    seed : int

    Returns
    -------
    list of Fold

    Raises
    ------
    TrainingError
        If there are fewer points than folds.

    Examples
    --------
    >>> for fold in random_folds(5, 2, seed=0):
    ...     print(fold.label, fold.train, fold.test)
    random 1 [2 4] [0 1 3]
    random 2 [0 1 3] [2 4]
    """
    hand = np.random.default_rng(seed).permutation(np.arange(size) % folds)
    return check_folds(
        [_fold(hand != part, hand == part, f"random {part + 1}") for part in range(folds)], size
    )


def blocked_folds(
    region: npt.NDArray[Any],
    row: npt.NDArray[Any],
    column: npt.NDArray[Any],
    *,
    folds: int,
    block_cells: int,
    seed: int,
    buffer_cells: int = 0,
) -> list[Fold]:
    """Deal square blocks of cells out: every layer of a block stays in one fold.

    Parameters
    ----------
    region : ndarray, shape (point,)
        Code of the region each point belongs to.
    row, column : ndarray of int, shape (point,)
        Cell of the point in its region.
    folds : int
        Number of folds, at least 2; each region's blocks are dealt out evenly.
    block_cells : int
        Side of a block in cells; halved in a region too small to give every fold a block.
    seed : int
    buffer_cells : int, optional
        Cells around each scored block that are not trained on.

    Returns
    -------
    list of Fold

    Raises
    ------
    TrainingError
        If a fold has nothing to train on or to score.
    """
    part = np.empty(region.shape, dtype=np.int64)
    random = np.random.default_rng(seed)
    for code in np.unique(region):
        here = region == code
        count, member = _blocks(row[here], column[here], folds, block_cells)
        hand = random.permutation(np.arange(count) % folds)
        part[here] = hand[member]
    made = []
    for number in range(folds):
        test = part == number
        near = _near(region, row, column, test, buffer_cells) if buffer_cells else test
        made.append(_fold(~near, test, f"blocks {number + 1}"))
    return check_folds(made, region.size)


def _blocks(
    row: npt.NDArray[Any], column: npt.NDArray[Any], folds: int, side: int
) -> tuple[int, npt.NDArray[np.int64]]:
    """Deal the cells of one region into blocks, at least one a fold where that can be."""
    while True:
        blocks = np.stack([row // side, column // side], axis=1)
        corners, member = np.unique(blocks, axis=0, return_inverse=True)
        if len(corners) >= folds or side == 1:
            return len(corners), member.reshape(-1)
        side = (side + 1) // 2


def _near(
    region: npt.NDArray[Any],
    row: npt.NDArray[Any],
    column: npt.NDArray[Any],
    test: npt.NDArray[np.bool_],
    cells: int,
) -> npt.NDArray[np.bool_]:
    near = test.copy()
    for code in np.unique(region):
        here = region == code
        rows, columns = row[here], column[here]
        taken = np.zeros((rows.max() + 1 + 2 * cells, columns.max() + 1 + 2 * cells), dtype=bool)
        hit = test[here]
        for down in range(2 * cells + 1):
            for right in range(2 * cells + 1):
                taken[rows[hit] + down, columns[hit] + right] = True
        near[here] |= taken[rows + cells, columns + cells]
    return near


def region_folds(
    region: npt.NDArray[Any], column: npt.NDArray[Any], *, strips: int = 4
) -> list[Fold]:
    """Leave one region out at a time: what a closure is worth in seas it has not seen.

    A single region is cut into strips along x, each of whole columns of cells, and the
    labels say so.

    Parameters
    ----------
    region : ndarray, shape (point,)
        Code of the region each point belongs to.
    column : ndarray of int, shape (point,)
        Cell of the point along x.
    strips : int, optional
        Strips that stand in for regions where there is only one.

    Returns
    -------
    list of Fold

    Raises
    ------
    TrainingError
        If a single region is too narrow to be cut into strips.

    Examples
    --------
    >>> import numpy as np
    >>> folds = region_folds(np.array(["a", "a", "b"]), np.array([0, 1, 0]))
    >>> [(fold.label, fold.test.tolist()) for fold in folds]
    [('region a', [0, 1]), ('region b', [2])]
    """
    codes = np.unique(region)
    if codes.size > 1:
        made = [_fold(region != code, region == code, f"region {code}") for code in codes]
        return check_folds(made, region.size)
    columns = np.unique(column)
    made = []
    for number, strip in enumerate(np.array_split(columns, strips)):
        inside = np.isin(column, strip)
        made.append(
            _fold(~inside, inside, f"strip {number + 1} of {strips} along x (only one region)")
        )
    return check_folds(made, region.size)


def make_folds(
    kind: FoldKind,
    region: npt.NDArray[Any],
    row: npt.NDArray[Any],
    column: npt.NDArray[Any],
    *,
    folds: int,
    block_cells: int,
    seed: int,
) -> list[Fold]:
    """Make the folds of one kind.

    Parameters
    ----------
    kind : {"random", "blocked", "region"}
    region, row, column : ndarray, shape (point,)
        Region code and cell of each point.
    folds, block_cells, seed : int
        Settings of the random and blocked folds, and the strips of a single region.

    Returns
    -------
    list of Fold

    Raises
    ------
    TrainingError
        If a fold would be empty.
    """
    if kind == "random":
        return random_folds(region.size, folds, seed)
    if kind == "blocked":
        return blocked_folds(region, row, column, folds=folds, block_cells=block_cells, seed=seed)
    return region_folds(region, column, strips=folds)
