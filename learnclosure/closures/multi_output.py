"""Base of regressors that fit several outputs at once."""

from __future__ import annotations

from functools import cache
from typing import Any, ClassVar

import numpy as np
import numpy.typing as npt
from sklearn.base import BaseEstimator, RegressorMixin
from sklearn.utils.validation import _check_sample_weight, check_is_fitted, validate_data
from threadpoolctl import ThreadpoolController

FloatArray = npt.NDArray[np.float64]


@cache
def _thread_pools() -> ThreadpoolController:
    """Find the thread pools of the numerical libraries, once, since the search is slow."""
    return ThreadpoolController()


class MultiOutputRegressor(RegressorMixin, BaseEstimator):  # type: ignore[misc]
    """Common shape handling: one or several outputs, checked inputs, one thread.

    Attributes
    ----------
    kind : str
        Form of the regressor, for whoever writes it out.
    n_features_in_, n_outputs_ : int
    flat_output_ : bool
        Whether the outputs given to ``fit`` were flat.
    """

    kind: ClassVar[str]

    def fit(
        self, X: npt.ArrayLike, y: npt.ArrayLike, sample_weight: npt.ArrayLike | None = None
    ) -> Any:
        """Fit the regressor.

        Parameters
        ----------
        X : array-like, shape (point, feature)
        y : array-like, shape (point, output) or (point,)
        sample_weight : array-like, shape (point,), optional

        Returns
        -------
        self
        """
        matrix, outputs = validate_data(
            self, X, y, dtype=np.float64, multi_output=True, y_numeric=True
        )
        outputs = np.asarray(outputs, dtype=np.float64)
        weights = _check_sample_weight(sample_weight, matrix, dtype=np.float64)
        self.flat_output_ = outputs.ndim == 1
        self.n_outputs_ = 1 if self.flat_output_ else outputs.shape[1]
        with _thread_pools().limit(limits=1):
            self._fit(matrix, outputs.reshape(len(matrix), -1), weights)
        return self

    def predict(self, X: npt.ArrayLike) -> FloatArray:
        """Predict the outputs.

        Parameters
        ----------
        X : array-like, shape (point, feature)

        Returns
        -------
        ndarray, shape (point, output) or (point,)
            Flat if the outputs given to ``fit`` were.
        """
        check_is_fitted(self)
        matrix = validate_data(self, X, dtype=np.float64, reset=False)
        with _thread_pools().limit(limits=1):
            outputs = self._predict(matrix)
        return outputs[:, 0] if self.flat_output_ else outputs

    def __sklearn_tags__(self) -> Any:
        tags = super().__sklearn_tags__()
        tags.target_tags.multi_output = True
        return tags

    def _fit(self, matrix: FloatArray, outputs: FloatArray, weights: FloatArray) -> None:
        raise NotImplementedError

    def _predict(self, matrix: FloatArray) -> FloatArray:
        raise NotImplementedError
