"""Regressors behind a closure: scikit-learn estimators that an emitter can write out.

Each class fits several outputs at once, keeps everything a prediction needs in public
attributes and names its form in ``kind``: ``"ridge"``, ``"forest"``, ``"boosting"``,
``"mlp"`` or ``"mean"``. All are deterministic for a given ``random_state`` and fit on one
thread, so that results do not depend on the machine's number of cores.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from typing import Any

import numpy as np
import numpy.typing as npt
from sklearn.base import clone
from sklearn.ensemble import ExtraTreesRegressor, HistGradientBoostingRegressor
from sklearn.exceptions import ConvergenceWarning
from sklearn.linear_model import Ridge
from sklearn.neural_network import MLPRegressor

from learnclosure.closures.multi_output import MultiOutputRegressor
from learnclosure.closures.preprocessing import ClippedQuantileNormal
from learnclosure.errors import TrainingError

FloatArray = npt.NDArray[np.float64]


class RidgeRegressor(MultiOutputRegressor):
    """Linear regression on normal scores with a quadratic penalty.

    Parameters
    ----------
    alpha : float, default 30.0
        Penalty on the squared coefficients (Hoerl and Kennard 1970, Technometrics 12, 55-67).

    Attributes
    ----------
    transformer_ : ClippedQuantileNormal
        Maps features to normal scores.
    coefficients_ : ndarray, shape (output, feature)
    intercept_ : ndarray, shape (output,)
        ``outputs = coefficients_ @ scores + intercept_``.
    """

    kind = "ridge"

    def __init__(self, alpha: float = 30.0) -> None:
        self.alpha = alpha

    def _fit(self, matrix: FloatArray, outputs: FloatArray, weights: FloatArray) -> None:
        self.transformer_ = ClippedQuantileNormal().fit(matrix, sample_weight=weights)
        model = Ridge(alpha=self.alpha, solver="cholesky")
        model.fit(self.transformer_.transform(matrix), outputs, sample_weight=weights)
        self.coefficients_ = np.atleast_2d(model.coef_)
        self.intercept_ = np.atleast_1d(model.intercept_)

    def _predict(self, matrix: FloatArray) -> FloatArray:
        scores = self.transformer_.transform(matrix)
        return np.asarray(scores @ self.coefficients_.T + self.intercept_)


class ForestRegressor(MultiOutputRegressor):
    """Extremely randomised trees with all outputs in each leaf.

    Features are rounded to single precision before fitting and predicting, which is what
    the trees compare. The number of leaves is bounded to keep the exported forest small.

    Parameters
    ----------
    n_estimators, max_leaf_nodes, min_samples_leaf : int
        Size of the forest.
    max_features : float, default 0.5
        Share of the features tried at each split.
    random_state : int, default 0

    Attributes
    ----------
    forest_ : sklearn.ensemble.ExtraTreesRegressor
        The prediction is the mean over ``forest_.estimators_``; their leaf values are
        the outputs.

    Notes
    -----
    Geurts, Ernst and Wehenkel 2006, Machine Learning 63, 3-42.
    """

    kind = "forest"

    def __init__(
        self,
        n_estimators: int = 60,
        max_leaf_nodes: int = 256,
        min_samples_leaf: int = 5,
        max_features: float = 0.5,
        random_state: int = 0,
    ) -> None:
        self.n_estimators = n_estimators
        self.max_leaf_nodes = max_leaf_nodes
        self.min_samples_leaf = min_samples_leaf
        self.max_features = max_features
        self.random_state = random_state

    def _fit(self, matrix: FloatArray, outputs: FloatArray, weights: FloatArray) -> None:
        self.forest_ = ExtraTreesRegressor(
            n_estimators=self.n_estimators,
            max_leaf_nodes=self.max_leaf_nodes,
            min_samples_leaf=self.min_samples_leaf,
            max_features=self.max_features,
            random_state=self.random_state,
            n_jobs=1,
        )
        target = outputs[:, 0] if outputs.shape[1] == 1 else outputs
        self.forest_.fit(matrix.astype(np.float32), target, sample_weight=weights)

    def _predict(self, matrix: FloatArray) -> FloatArray:
        outputs = np.asarray(self.forest_.predict(matrix.astype(np.float32)), dtype=np.float64)
        return outputs.reshape(len(matrix), -1)


class BoostingRegressor(MultiOutputRegressor):
    """Gradient boosting on histograms, one model per output.

    Parameters
    ----------
    max_iter, max_leaf_nodes, min_samples_leaf, max_bins : int
        Size of each model.
    learning_rate, l2_regularization, max_features : float
        As in scikit-learn.
    random_state : int, default 0

    Attributes
    ----------
    boosters_ : list of sklearn.ensemble.HistGradientBoostingRegressor, one per output

    Notes
    -----
    Friedman 2001, Annals of Statistics 29, 1189-1232.
    """

    kind = "boosting"

    def __init__(
        self,
        max_iter: int = 60,
        max_leaf_nodes: int = 12,
        min_samples_leaf: int = 30,
        learning_rate: float = 0.08,
        l2_regularization: float = 10.0,
        max_bins: int = 63,
        max_features: float = 0.3,
        random_state: int = 0,
    ) -> None:
        self.max_iter = max_iter
        self.max_leaf_nodes = max_leaf_nodes
        self.min_samples_leaf = min_samples_leaf
        self.learning_rate = learning_rate
        self.l2_regularization = l2_regularization
        self.max_bins = max_bins
        self.max_features = max_features
        self.random_state = random_state

    def _fit(self, matrix: FloatArray, outputs: FloatArray, weights: FloatArray) -> None:
        coarse = _coarsened(matrix, weights, self.max_bins)
        self.n_iter_ = self.max_iter
        self.boosters_ = [
            HistGradientBoostingRegressor(
                max_iter=self.max_iter,
                max_leaf_nodes=self.max_leaf_nodes,
                min_samples_leaf=self.min_samples_leaf,
                learning_rate=self.learning_rate,
                l2_regularization=self.l2_regularization,
                max_bins=self.max_bins,
                max_features=self.max_features,
                early_stopping=False,
                random_state=self.random_state,
            ).fit(coarse, column, sample_weight=weights)
            for column in outputs.T
        ]

    def _predict(self, matrix: FloatArray) -> FloatArray:
        return np.column_stack([booster.predict(matrix) for booster in self.boosters_])


def _coarsened(matrix: FloatArray, weights: FloatArray, count: int) -> FloatArray:
    """Replace each value by the nearest of a few weighted quantiles of its feature.

    Boosting then puts its thresholds midway between these quantiles, not on values of the
    sample, where rounding would decide; values compare with them as before. It also spares
    scikit-learn's own weighted binning, which takes ten times as long as the fit.
    """
    levels = (np.arange(count) + 0.5) / count
    quantiles = np.quantile(matrix, levels, axis=0, weights=weights, method="inverted_cdf")
    result = np.empty_like(matrix)
    for number, column in enumerate(matrix.T):
        nearest = np.unique(quantiles[:, number].astype(np.float32).astype(np.float64))
        middles = 0.5 * (nearest[1:] + nearest[:-1])
        result[:, number] = nearest[np.searchsorted(middles, column)]
    return result


class PerceptronRegressor(MultiOutputRegressor):
    """Multilayer perceptron on normal scores, fitted to standardised outputs.

    Parameters
    ----------
    hidden_layers : tuple of int, default (32, 32)
    penalty : float, default 10.0
        Penalty on the squared weights.
    learning_rate : float, default 5e-3
    epochs : int, default 20
        Passes over the sample; fixed, so that no part of a region serves to stop training.
    batch : int, default 256
        Points per step.
    random_state : int, default 0

    Attributes
    ----------
    transformer_ : ClippedQuantileNormal
        Maps features to normal scores.
    weights_ : list of ndarray, shape (units in, units out)
    biases_ : list of ndarray, shape (units out,)
        Of each layer; the last maps to outputs in their own units.
    activation_ : str
        ``"tanh"`` after every layer but the last.

    Notes
    -----
    Fitted with Adam (Kingma and Ba 2015, arXiv:1412.6980).
    """

    kind = "mlp"

    def __init__(
        self,
        hidden_layers: tuple[int, ...] = (32, 32),
        penalty: float = 10.0,
        learning_rate: float = 5e-3,
        epochs: int = 20,
        batch: int = 256,
        random_state: int = 0,
    ) -> None:
        self.hidden_layers = hidden_layers
        self.penalty = penalty
        self.learning_rate = learning_rate
        self.epochs = epochs
        self.batch = batch
        self.random_state = random_state

    def _fit(self, matrix: FloatArray, outputs: FloatArray, weights: FloatArray) -> None:
        self.transformer_ = ClippedQuantileNormal().fit(matrix, sample_weight=weights)
        center = np.average(outputs, axis=0, weights=weights)
        spread = np.sqrt(np.average((outputs - center) ** 2, axis=0, weights=weights))
        spread = np.where(spread > 0.0, spread, 1.0)
        model = MLPRegressor(
            hidden_layer_sizes=self.hidden_layers,
            activation="tanh",
            alpha=self.penalty,
            batch_size=min(self.batch, len(matrix)),
            learning_rate_init=self.learning_rate,
            max_iter=self.epochs,
            n_iter_no_change=self.epochs,
            tol=0.0,
            random_state=self.random_state,
        )
        standard = (outputs - center) / spread
        with warnings.catch_warnings():
            # The number of passes is fixed on purpose; its end is no failure to converge.
            warnings.simplefilter("ignore", ConvergenceWarning)
            model.fit(
                self.transformer_.transform(matrix),
                standard[:, 0] if standard.shape[1] == 1 else standard,
                sample_weight=weights / np.mean(weights),
            )
        self.activation_ = "tanh"
        self.weights_ = [np.array(values) for values in model.coefs_]
        self.biases_ = [np.array(values) for values in model.intercepts_]
        self.weights_[-1] = self.weights_[-1] * spread
        self.biases_[-1] = self.biases_[-1] * spread + center

    def _predict(self, matrix: FloatArray) -> FloatArray:
        values = self.transformer_.transform(matrix)
        for weights, biases in zip(self.weights_[:-1], self.biases_[:-1], strict=True):
            values = np.tanh(values @ weights + biases)
        return np.asarray(values @ self.weights_[-1] + self.biases_[-1])


class MeanRegressor(MultiOutputRegressor):
    """Mean of the predictions of several regressors.

    Parameters
    ----------
    parts : sequence of estimators, optional
        Unfitted regressors of this module; by default a forest and a perceptron.

    Attributes
    ----------
    parts_ : list of estimators
        Fitted copies.
    """

    kind = "mean"

    def __init__(self, parts: Sequence[Any] | None = None) -> None:
        self.parts = parts

    def _fit(self, matrix: FloatArray, outputs: FloatArray, weights: FloatArray) -> None:
        parts = (ForestRegressor(), PerceptronRegressor()) if self.parts is None else self.parts
        self.parts_ = [clone(part).fit(matrix, outputs, sample_weight=weights) for part in parts]

    def _predict(self, matrix: FloatArray) -> FloatArray:
        return np.asarray(np.mean([part.predict(matrix) for part in self.parts_], axis=0))

    @classmethod
    def from_fitted(cls, parts: Sequence[Any]) -> MeanRegressor:
        """Join regressors that were fitted to the same points and outputs.

        Parameters
        ----------
        parts : sequence of fitted estimators

        Returns
        -------
        MeanRegressor
            Fitted; its parts are the ones given, not copies.
        """
        joined = cls(parts=[clone(part) for part in parts])
        joined.parts_ = list(parts)
        joined.n_features_in_ = parts[0].n_features_in_
        joined.n_outputs_ = parts[0].n_outputs_
        joined.flat_output_ = parts[0].flat_output_
        return joined


MEAN_PARTS: dict[str, tuple[str, ...]] = {"trees-and-mlp": ("extra-trees", "mlp")}
"""Which regressors a mean is made of, by name."""


def make_regressor(name: str, seed: int) -> Any:
    """Return an unfitted regressor by the name a study uses.

    Parameters
    ----------
    name : str
        ``"ridge"``, ``"extra-trees"``, ``"histogram-boosting"``, ``"mlp"`` or
        ``"trees-and-mlp"``.
    seed : int
        Seed of everything random in fitting it.

    Returns
    -------
    estimator
        With ``fit(X, y, sample_weight)``, ``predict(X)`` and ``kind``.

    Raises
    ------
    TrainingError
        If there is no regressor of that name.
    """
    if name == "ridge":
        return RidgeRegressor()
    if name == "extra-trees":
        return ForestRegressor(random_state=seed)
    if name == "histogram-boosting":
        return BoostingRegressor(random_state=seed)
    if name == "mlp":
        return PerceptronRegressor(random_state=seed)
    if name in MEAN_PARTS:
        return MeanRegressor([make_regressor(part, seed) for part in MEAN_PARTS[name]])
    raise TrainingError(
        "no such regressor",
        where="closure.regressors",
        found=repr(name),
        expected="ridge, extra-trees, histogram-boosting, mlp or trees-and-mlp",
    )
