"""Choosing a closure by leaving one region out at a time.

The score that decides is the flux R2 on withheld tracers, averaged over layers and left-out
regions: what a closure is for, where it will be used. Test regions take no part.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
import numpy.typing as npt

from learnclosure.closures.closure import Closure, true_frame_components
from learnclosure.closures.intervals import HalfWidths, calibrate_half_widths
from learnclosure.closures.pointwise import half_widths_on_axes
from learnclosure.closures.table import Table
from learnclosure.errors import TrainingError
from learnclosure.study import ClosureSettings, FeatureSettings, ValidationSettings
from learnclosure.validation.folds import Fold, region_folds
from learnclosure.validation.out_of_fold import (
    Candidate,
    OutOfFold,
    Progress,
    Task,
    carry_out,
    gather,
    one_thread,
    silent,
)
from learnclosure.validation.records import plain
from learnclosure.validation.scores import mean_score
from learnclosure.validation.table_scores import pooled_scores, region_scores
from learnclosure.validation.truth import FluxTruth, flux_truth

if TYPE_CHECKING:
    import xarray as xr

FloatArray = npt.NDArray[np.float64]

SIMPLEST_FIRST = ("ridge", "mlp", "histogram-boosting", "extra-trees", "trees-and-mlp")
"""Regressors by size of what has to be shipped; the first of nearly equal ones is taken."""
TARGETS_FIRST = ("linear", "log-cholesky")
NEAR_TIE = 0.003
"""Difference of mean flux R2 below which the simpler candidate is taken."""
FITTED_SHARE = 0.85
"""Share of the work that lies in comparing candidates, for the progress bar."""


@dataclass(frozen=True)
class CandidateScore:
    """How one candidate did on regions left out.

    Attributes
    ----------
    candidate : Candidate
    flux_r2 : list of float
        One value a layer, mean over left-out regions.
    flux_r2_mean : float
        Mean over layers.
    """

    candidate: Candidate
    flux_r2: list[float]
    flux_r2_mean: float

    def as_record(self) -> dict[str, Any]:
        """Return the score as plain data."""
        return {
            "regressor": self.candidate.regressor,
            "target": self.candidate.target,
            "flux_r2": self.flux_r2,
            "flux_r2_mean": self.flux_r2_mean,
        }


@dataclass(frozen=True)
class Selection:
    """How a closure was chosen and what it is worth on regions left out.

    Attributes
    ----------
    family : str
    chosen : Candidate
    scores : tuple of CandidateScore
        Best first.
    folds : tuple of str
        What was left out in turn.
    pooled : dict
        Out-of-fold scores over all training regions.
    regions : dict of str to dict
        Out-of-fold scores of each training region.
    """

    family: str
    chosen: Candidate
    scores: tuple[CandidateScore, ...]
    folds: tuple[str, ...]
    pooled: dict[str, Any]
    regions: dict[str, dict[str, Any]]

    def as_record(self) -> dict[str, Any]:
        """Return the selection as JSON-safe data."""
        record = {
            "family": self.family,
            "chosen": {"regressor": self.chosen.regressor, "target": self.chosen.target},
            "selection": [score.as_record() for score in self.scores],
            "rule": (
                "highest flux R2 averaged over layers and left-out regions; within "
                f"{NEAR_TIE:g} of it the first of {', '.join(SIMPLEST_FIRST)}, then of "
                f"{', '.join(TARGETS_FIRST)}"
            ),
            "left_out": list(self.folds),
            "out_of_fold": {"pooled": self.pooled, "regions": self.regions},
        }
        made: dict[str, Any] = plain(record)
        return made


def choose(scores: Sequence[CandidateScore]) -> CandidateScore:
    """Return the best candidate, or the simplest of those nearly as good.

    Parameters
    ----------
    scores : sequence of CandidateScore

    Returns
    -------
    CandidateScore

    Raises
    ------
    TrainingError
        If no candidate has a defined score.
    """
    defined = [score for score in scores if np.isfinite(score.flux_r2_mean)]
    if not defined:
        raise TrainingError(
            "no candidate has a score on the regions left out",
            found=f"{len(scores)} candidates",
            remedy="check that withheld tracers have fluxes where the tensor is determined",
        )
    best = max(score.flux_r2_mean for score in defined)
    near = [score for score in defined if score.flux_r2_mean >= best - NEAR_TIE]
    return min(
        near,
        key=lambda score: (
            SIMPLEST_FIRST.index(score.candidate.regressor),
            TARGETS_FIRST.index(score.candidate.target),
        ),
    )


def compare(
    table: Table,
    truths: Mapping[str, FluxTruth],
    folds: Sequence[Fold],
    family: str,
    settings: ClosureSettings,
    progress: Progress,
    features: FeatureSettings | None = None,
) -> tuple[list[CandidateScore], dict[Candidate, OutOfFold]]:
    """Predict every fold by every candidate trained without it, and score the result.

    Parameters
    ----------
    table : Table
    truths : mapping of str to FluxTruth
    folds : sequence of Fold
    family : str
    settings : ClosureSettings
        Regressors and targets to try.
    progress : callable
    features : FeatureSettings, optional

    Returns
    -------
    scores : list of CandidateScore
        Best first.
    predictions : dict of Candidate to OutOfFold
    """
    regressors = sorted(settings.regressors, key=SIMPLEST_FIRST.index)
    lots = [
        tuple(Candidate(regressor, target) for regressor in regressors)
        for target in settings.targets
    ]
    seen = FeatureSettings() if features is None else features
    tasks = [Task(family, lot, fold, seen) for lot in lots for fold in folds]
    note = f"{len(lots) * len(regressors)} candidates, {len(folds)} folds"
    answers = carry_out(table, tasks, settings, progress=progress, note=note)
    predictions: dict[Candidate, OutOfFold] = {}
    scores = []
    for lot_number, lot in enumerate(lots):
        of_lot = answers[lot_number * len(folds) : (lot_number + 1) * len(folds)]
        for number, candidate in enumerate(lot):
            predictions[candidate] = gather(table, folds, [answer[number] for answer in of_lot])
            flux = pooled_scores(table, predictions[candidate].tensor, truths)["flux_r2"]
            scores.append(CandidateScore(candidate, flux, mean_score(flux)))
    scores.sort(key=lambda score: -np.nan_to_num(score.flux_r2_mean, nan=-np.inf))
    return scores, predictions


def left_out_half_widths(
    calibrated: HalfWidths, guess: OutOfFold, axes: Any, floor: float
) -> FloatArray:
    """Half-widths each fold would have got from the others alone.

    Parameters
    ----------
    calibrated : HalfWidths
        With the order statistics of every fold.
    guess : OutOfFold
    axes : Axes
        Local frame of every point.
    floor : float, m2 s-1

    Returns
    -------
    ndarray, shape (point, 4), m2 s-1
        On model axes; what a half-width calibrated without a region covers in it.
    """
    widths = np.empty_like(guess.frame)
    for label in np.unique(guess.group):
        here = guess.group == label
        others = [values for name, values in calibrated.by_region.items() if name != label]
        frame = guess.frame[here].T
        widths[here] = np.column_stack(
            half_widths_on_axes(
                np,
                type(axes)(*(np.broadcast_to(values, here.shape)[here] for values in axes)),
                (frame[0], frame[1], frame[2], frame[3]),
                np.max(others, axis=0),
                floor,
            )
        )
    return widths


def select_closure(
    table: Table,
    statistics: Mapping[str, xr.Dataset],
    family: str,
    settings: ClosureSettings,
    validation: ValidationSettings,
    progress: Progress = silent,
    features: FeatureSettings | None = None,
) -> tuple[Closure, Selection]:
    """Choose, fit and calibrate the closure of one family.

    Every combination of regressor and target predicts each training region from the others
    (strips of it where there is only one). The best is fitted to all training regions; its
    half-widths come from its predictions of the regions left out.

    Parameters
    ----------
    table : Table
        Points of the training regions.
    statistics : mapping of str to xarray.Dataset
        Statistics of the training regions.
    family : {"mean-field", "local-energy"}
    settings : ClosureSettings
    validation : ValidationSettings
        Its number of folds is the number of strips where there is one region.
    progress : callable, optional
        Called with ``(share done, note)``.
    features : FeatureSettings, optional
        Groups of features and the local frame.

    Returns
    -------
    closure : Closure
    selection : Selection

    Raises
    ------
    TrainingError
        If the table is too small or has no score.
    """
    by_name = {truth.region: truth for truth in map(flux_truth, statistics.values())}
    truths = {name: by_name[name] for name in table.regions}
    folds = region_folds(table.region, table.column, strips=validation.folds)
    scores, predictions = compare(
        table,
        truths,
        folds,
        family,
        settings,
        lambda share, note: progress(FITTED_SHARE * share, note),
        features,
    )
    chosen = choose(scores).candidate
    guess = predictions[chosen]
    progress(FITTED_SHARE, f"fitting {chosen.regressor}, {chosen.target}")
    with one_thread():
        closure = Closure(family, chosen.regressor, chosen.target, settings, features).fit(table)
    axes = closure.prepare(np, table.inputs).axes
    half_widths = calibrate_half_widths(
        guess.frame,
        true_frame_components(table, axes),
        guess.group,
        settings.miscoverage,
        settings.floor,
    )
    closure.set_half_widths(half_widths)
    widths = left_out_half_widths(half_widths, guess, axes, settings.floor)
    selection = Selection(
        family,
        chosen,
        tuple(scores),
        tuple(fold.label for fold in folds),
        pooled_scores(table, guess.tensor, truths),
        {
            name: region_scores(table, guess.tensor, truth, half_width=widths, trust=guess.trust)
            for name, truth in truths.items()
        },
    )
    return closure, selection
