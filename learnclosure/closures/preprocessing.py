"""Input transformation for smooth regressors: quantiles to normal scores, clipped."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
from scipy.special import ndtr
from sklearn.base import BaseEstimator, TransformerMixin
from sklearn.utils.validation import _check_sample_weight, check_is_fitted, validate_data

FloatArray = npt.NDArray[np.float64]

LEAST_KNOT_SPACING = 1e-4
"""Closest two knots may stand, as a share of the feature's range.

A steeper segment would multiply rounding differences between runtimes.
"""


class ClippedQuantileNormal(TransformerMixin, BaseEstimator):  # type: ignore[misc]
    """Map each feature to normal scores by a short piecewise-linear function.

    Knots are quantiles of the training sample at levels evenly spaced in normal score.
    Values beyond the first and last knot are clipped, so a regressor behind this
    transformer never sees anything outside what it was trained on. Knots that coincide,
    as for whole-number features, are merged and take the mean score of their group; a
    constant feature becomes zero.

    Parameters
    ----------
    n_knots : int, default 33
        Knots per feature before merging.
    extreme_score : float, default 2.3263478740408408
        Normal score of the outermost knots; the default is the 1 and 99 % quantile.

    Attributes
    ----------
    knots_ : list of ndarray, one per feature, increasing
        Positions of the knots, in the units of the feature.
    values_ : list of ndarray, one per feature, increasing
        Normal score at each knot, 1.
    n_features_in_ : int
        Number of features.

    Notes
    -----
    Rank-based normal scores: Van der Waerden 1952, Indagationes Mathematicae 14, 453-458.

    Examples
    --------
    >>> import numpy as np
    >>> sample = np.arange(10_001.0)[:, None]
    >>> scores = ClippedQuantileNormal().fit(sample).transform([[5000.0], [1e9]])
    >>> scores.round(3).ravel().tolist()
    [0.0, 2.326]
    """

    def __init__(self, n_knots: int = 33, extreme_score: float = 2.3263478740408408) -> None:
        self.n_knots = n_knots
        self.extreme_score = extreme_score

    def fit(
        self,
        X: npt.ArrayLike,
        y: object = None,  # noqa: ARG002
        sample_weight: npt.ArrayLike | None = None,
    ) -> ClippedQuantileNormal:
        """Place the knots at weighted quantiles.

        Parameters
        ----------
        X : array-like, shape (point, feature)
        y : ignored
        sample_weight : array-like, shape (point,), optional

        Returns
        -------
        ClippedQuantileNormal
        """
        matrix = validate_data(self, X, dtype=np.float64)
        weights = _check_sample_weight(sample_weight, matrix, dtype=np.float64)
        scores = np.linspace(-self.extreme_score, self.extreme_score, self.n_knots)
        positions = np.quantile(
            matrix, ndtr(scores), axis=0, weights=weights, method="inverted_cdf"
        )
        self.knots_: list[FloatArray] = []
        self.values_: list[FloatArray] = []
        for column in positions.T:
            knots, values = _merged(column, scores)
            self.knots_.append(knots)
            self.values_.append(values)
        return self

    def transform(self, X: npt.ArrayLike) -> FloatArray:
        """Return the normal score of every value.

        Parameters
        ----------
        X : array-like, shape (point, feature)

        Returns
        -------
        ndarray, shape (point, feature)
        """
        check_is_fitted(self)
        matrix: FloatArray = validate_data(self, X, dtype=np.float64, reset=False)
        result = np.empty_like(matrix)
        for number, (knots, values) in enumerate(zip(self.knots_, self.values_, strict=True)):
            result[:, number] = np.interp(matrix[:, number], knots, values)
        return result

    def __sklearn_tags__(self) -> Any:
        tags = super().__sklearn_tags__()
        tags.transformer_tags.preserves_dtype = ["float64"]
        return tags


def _merged(positions: FloatArray, scores: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Merge knots that (almost) coincide into one at the group's first position."""
    span = float(positions[-1] - positions[0])
    if not span > 0.0:
        return positions[:1].copy(), np.zeros(1)
    groups: list[list[int]] = [[0]]
    for number in range(1, len(positions)):
        if positions[number] - positions[groups[-1][0]] < LEAST_KNOT_SPACING * span:
            groups[-1].append(number)
        else:
            groups.append([number])
    knots = np.array([positions[group[0]] for group in groups])
    values = np.array([float(np.mean(scores[group])) for group in groups])
    return knots, values
