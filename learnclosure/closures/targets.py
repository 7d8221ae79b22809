"""Learnable forms of a transport tensor in the local frame.

A target turns the symmetric part ``S`` and the antisymmetric part ``alpha``, both divided
by the family's scale, into four columns of order one and back. Columns are clipped to
their 1 and 99 % quantiles in training, and standardised, so that every regressor weighs
them alike.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, ClassVar

import numpy as np
import numpy.typing as npt

from learnclosure.closures.constraints import bounded_tensor, clip
from learnclosure.errors import TrainingError

FloatArray = npt.NDArray[np.float64]

CLIPPED_TAIL = 0.01


class _Target:
    """What both forms share: clipping and standardising columns.

    Attributes
    ----------
    lowest, highest : ndarray, shape (4,)
        Range of each column after clipping.
    center, spread : ndarray, shape (4,)
        Mean and standard deviation of each clipped column.
    trace_factor : float
        What the decoded symmetric part is multiplied by; 1 unless corrected.
    """

    name: ClassVar[str]

    def __init__(self) -> None:
        self.trace_factor = 1.0

    def fit(self, nn: FloatArray, tt: FloatArray, nt: FloatArray, alpha: FloatArray) -> Any:
        """Learn the range, mean and spread of each column.

        Parameters
        ----------
        nn, tt, nt, alpha : ndarray, shape (point,)
            Components divided by the family's scale.

        Returns
        -------
        self
        """
        columns = np.column_stack(self._columns(nn, tt, nt, alpha))
        self.lowest, self.highest = np.quantile(columns, [CLIPPED_TAIL, 1 - CLIPPED_TAIL], axis=0)
        clipped = np.clip(columns, self.lowest, self.highest)
        self.center: FloatArray = clipped.mean(axis=0)
        spread = clipped.std(axis=0)
        self.spread: FloatArray = np.where(spread > 0.0, spread, 1.0)
        return self

    def encode(
        self, nn: FloatArray, tt: FloatArray, nt: FloatArray, alpha: FloatArray
    ) -> FloatArray:
        """Return the columns a regressor is trained on.

        Parameters
        ----------
        nn, tt, nt, alpha : ndarray, shape (point,)
            Components divided by the family's scale.

        Returns
        -------
        ndarray, shape (point, 4)
        """
        columns = np.column_stack(self._columns(nn, tt, nt, alpha))
        clipped = np.clip(columns, self.lowest, self.highest)
        return np.asarray((clipped - self.center) / self.spread)

    def decode(self, xp: Any, columns: Sequence[Any]) -> tuple[Any, Any, Any, Any]:
        """Turn predicted columns back into components.

        Parameters
        ----------
        xp : namespace
            Array namespace: NumPy or the graph.
        columns : sequence of four arrays

        Returns
        -------
        nn, tt, nt, alpha : array
            Components divided by the family's scale.
        """
        raw = [
            columns[number] * float(self.spread[number]) + float(self.center[number])
            for number in range(4)
        ]
        nn, tt, nt, alpha = self._components(xp, raw)
        factor = self.trace_factor
        return nn * factor, tt * factor, nt * factor, alpha

    def correct_trace(
        self, columns: FloatArray, trace: FloatArray, scale: FloatArray, weight: FloatArray
    ) -> None:
        """Choose the factor that gives the predicted trace its true mean.

        A regression of logarithms predicts a median-like value and so too little on
        average. The remedy is to multiply what is transformed back by the mean of the
        true over the mean of the naively retransformed values (Duan 1983, Journal of
        the American Statistical Association 78, 605-610, in its ratio form).

        Parameters
        ----------
        columns : ndarray, shape (point, 4)
            Predicted columns, best of points not trained on.
        trace : ndarray, shape (point,), m2 s-1
            True trace of the tensor.
        scale : ndarray, shape (point,), m2 s-1
            The family's scale.
        weight : ndarray, shape (point,)
        """
        self.trace_factor = 1.0
        nn, tt, _, _ = self.decode(np, list(columns.T))
        naive = float(np.sum(weight * scale * (nn + tt)))
        true = float(np.sum(weight * trace))
        if naive > 0.0 and true > 0.0:
            self.trace_factor = true / naive

    def _columns(
        self, nn: FloatArray, tt: FloatArray, nt: FloatArray, alpha: FloatArray
    ) -> list[FloatArray]:
        raise NotImplementedError

    def _components(self, xp: Any, raw: list[Any]) -> tuple[Any, Any, Any, Any]:
        raise NotImplementedError


class LinearTarget(_Target):
    """The components themselves: ``S_nn, S_tt, S_nt, alpha``."""

    name = "linear"
    corrected: ClassVar[bool] = False

    def _columns(
        self, nn: FloatArray, tt: FloatArray, nt: FloatArray, alpha: FloatArray
    ) -> list[FloatArray]:
        return [nn, tt, nt, alpha]

    def _components(self, xp: Any, raw: list[Any]) -> tuple[Any, Any, Any, Any]:  # noqa: ARG002
        nn, tt, nt, alpha = raw
        return nn, tt, nt, alpha


class LogCholeskyTarget(_Target):
    """Logarithms of the diagonal of the Cholesky factor of ``S``, its lower corner, ``alpha``.

    With ``S = L L^T`` the columns are ``log L_nn``, ``log L_tt``, ``L_tn`` and ``alpha``;
    whatever is predicted decodes to a positive definite ``S`` (Pinheiro and Bates 1996,
    Statistics and Computing 6, 289-296). Eigenvalues of ``S`` below a small share of its
    mean trace are raised to it before the logarithm. Predicted logarithms are held
    within the trained range.
    """

    name = "log-cholesky"
    corrected: ClassVar[bool] = True
    relative_floor: ClassVar[float] = 1e-3

    def fit(self, nn: FloatArray, tt: FloatArray, nt: FloatArray, alpha: FloatArray) -> Any:
        """Learn the least eigenvalue, then the range of each column.

        Parameters
        ----------
        nn, tt, nt, alpha : ndarray, shape (point,)
            Components divided by the family's scale.

        Returns
        -------
        self

        Raises
        ------
        TrainingError
            If the mean trace is not positive.
        """
        mean = float(np.mean(0.5 * (nn + tt)))
        if not mean > 0.0:
            raise TrainingError(
                "the transport tensor has no positive mean trace",
                found=f"{mean:g} times the scale",
                remedy="diagnose with a positive floor or use the linear target",
            )
        self.least = self.relative_floor * mean
        return super().fit(nn, tt, nt, alpha)

    def _columns(
        self, nn: FloatArray, tt: FloatArray, nt: FloatArray, alpha: FloatArray
    ) -> list[FloatArray]:
        nn, tt, nt, _ = bounded_tensor(np, nn, tt, nt, alpha, self.least, np.inf)
        corner = np.sqrt(nn)
        off = nt / corner
        rest = np.sqrt(np.maximum(tt - off * off, 0.5 * self.least))
        return [np.log(corner), np.log(rest), off, alpha]

    def _components(self, xp: Any, raw: list[Any]) -> tuple[Any, Any, Any, Any]:
        first, second, off, alpha = raw
        corner = xp.exp(clip(xp, first, float(self.lowest[0]), float(self.highest[0])))
        rest = xp.exp(clip(xp, second, float(self.lowest[1]), float(self.highest[1])))
        return corner * corner, off * off + rest * rest, off * corner, alpha


def make_target(name: str) -> LinearTarget | LogCholeskyTarget:
    """Return an unfitted target by the name a study uses.

    Parameters
    ----------
    name : {"linear", "log-cholesky"}

    Returns
    -------
    LinearTarget or LogCholeskyTarget

    Raises
    ------
    TrainingError
        If there is no target of that name.
    """
    if name == LinearTarget.name:
        return LinearTarget()
    if name == LogCholeskyTarget.name:
        return LogCholeskyTarget()
    raise TrainingError(
        "no such target",
        where="closure.targets",
        found=repr(name),
        expected="linear or log-cholesky",
    )
