"""Predictions for points a closure has not seen, several fits at a time.

Every fit runs on one thread in a process of its own kind, so results do not depend on the
number of processes.
"""

from __future__ import annotations

import os
from collections.abc import Callable, Sequence
from contextlib import AbstractContextManager
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt
from joblib import Parallel, delayed
from threadpoolctl import threadpool_limits

from learnclosure.closures.closure import Closure
from learnclosure.closures.table import Table
from learnclosure.study import ClosureSettings, FeatureSettings
from learnclosure.validation.folds import Fold

FloatArray = npt.NDArray[np.float64]
Progress = Callable[[float, str], None]
"""Called with the share done (0 to 1) and a short note."""

PROCESSES = 2
SMALL_TABLE = 4000
"""Points below which starting processes costs more than it saves."""


def silent(share: float, note: str) -> None:
    """Report nothing: the default progress."""


def one_thread() -> AbstractContextManager[Any]:
    """Keep linear algebra and boosting on one thread, so that sums have one order."""
    limits: AbstractContextManager[Any] = threadpool_limits(limits=1)
    return limits


@dataclass(frozen=True, order=True)
class Candidate:
    """One way to make a closure.

    Attributes
    ----------
    regressor, target : str
    """

    regressor: str
    target: str


@dataclass(frozen=True)
class OutOfFold:
    """Predictions for every point by a closure trained without the point's fold.

    Attributes
    ----------
    tensor : ndarray, shape (point, 4), m2 s-1
        Components xx, xy, yx, yy on model axes; NaN for points of no fold.
    frame : ndarray, shape (point, 4), m2 s-1
        Components nn, nt, tn, tt in the local frame.
    trust : ndarray, shape (point,), 1
    group : ndarray of str, shape (point,)
        Label of the fold that scores the point; empty for points of no fold.
    """

    tensor: FloatArray
    frame: FloatArray
    trust: FloatArray
    group: npt.NDArray[np.str_]


@dataclass(frozen=True)
class Task:
    """Candidates of one family to be fitted without one fold.

    Attributes
    ----------
    family : str
    candidates : tuple of Candidate
        A mean of regressors takes its parts from those before it.
    fold : Fold
    features : FeatureSettings
    """

    family: str
    candidates: tuple[Candidate, ...]
    fold: Fold
    features: FeatureSettings


Answer = list[tuple[FloatArray, FloatArray, FloatArray]]


def _carry_out(table: Table, task: Task, settings: ClosureSettings) -> Answer:
    train = table.select(task.fold.train)
    inputs = table.select(task.fold.test).inputs
    fitted: list[Closure] = []
    answer: Answer = []
    with one_thread():
        for candidate in task.candidates:
            closure = Closure(
                task.family, candidate.regressor, candidate.target, settings, task.features
            )
            fitted.append(closure.fit(train, reuse=fitted))
            prediction = closure.predict(inputs)
            answer.append((prediction.tensor, closure.predict_frame(inputs), prediction.trust))
    return answer


def carry_out(
    table: Table,
    tasks: Sequence[Task],
    settings: ClosureSettings,
    *,
    progress: Progress,
    note: str,
) -> list[Answer]:
    """Fit and predict each task, two at a time where there are two cores and many points.

    Parameters
    ----------
    table : Table
    tasks : sequence of Task
    settings : ClosureSettings
    progress : callable
        Called with ``(share done, note)`` as tasks end.
    note : str

    Returns
    -------
    list
        For each task, in order: for each candidate the tensor (point, 4), the frame
        components (point, 4) and the trust (point,) of the scored points.
    """
    many = min(PROCESSES, os.cpu_count() or 1, len(tasks))
    processes = many if len(table) >= SMALL_TABLE else 1
    pool = Parallel(n_jobs=processes, return_as="generator")
    answers: list[Answer] = []
    for answer in pool(delayed(_carry_out)(table, task, settings) for task in tasks):
        answers.append(answer)
        progress(len(answers) / len(tasks), note)
    return answers


def gather(
    table: Table,
    folds: Sequence[Fold],
    answers: Sequence[tuple[FloatArray, FloatArray, FloatArray]],
) -> OutOfFold:
    """Put the predictions of one candidate over all folds together.

    Parameters
    ----------
    table : Table
    folds : sequence of Fold
    answers : sequence of tuple
        Tensor, frame components and trust of each fold's scored points.

    Returns
    -------
    OutOfFold
    """
    size = len(table)
    tensor, frame, trust = (
        np.full((size, 4), np.nan),
        np.full((size, 4), np.nan),
        np.full(size, np.nan),
    )
    group = np.full(size, "", dtype=f"<U{max(len(fold.label) for fold in folds)}")
    for fold, (its_tensor, its_frame, its_trust) in zip(folds, answers, strict=True):
        tensor[fold.test], frame[fold.test], trust[fold.test] = its_tensor, its_frame, its_trust
        group[fold.test] = fold.label
    return OutOfFold(tensor, frame, trust, group)
