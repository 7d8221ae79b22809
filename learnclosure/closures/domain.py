"""Trust: whether inputs lie within what a closure was trained on."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.errors import TrainingError

FloatArray = npt.NDArray[np.float64]


@dataclass
class RangeGuard:
    """Trust that falls as features leave the trained range, singly and jointly.

    The trained range of a feature is the interval between two of its quantiles, widened
    on both sides by a margin: a share of the interval's width plus a share of its largest
    magnitude. Beyond it the excess of a feature is its distance from the range divided by
    the margin, and trust is one minus the sum of all excesses, not below zero: one
    feature a full margin out, or two half a margin out, leave none.

    This is a guard of range only. Distance from the training sample says nothing on the
    size of the error inside the range, and none is claimed.

    Parameters
    ----------
    tail : float
        Share of the sample beyond either quantile.
    width_share, magnitude_share : float
        Parts of the margin.

    Attributes
    ----------
    names : tuple of str
        Features, in order.
    lower, upper : ndarray, shape (feature,)
        Trained range, in the units of each feature.
    margin : ndarray, shape (feature,)
        Distance over which a feature by itself uses up all trust.

    Examples
    --------
    >>> import numpy as np
    >>> guard = RangeGuard().fit({"speed": np.linspace(0.0, 1.0, 1001)})
    >>> guard.trust(np, {"speed": np.array([0.5, 1.3, 9.0])}).round(2).tolist()
    [1.0, 1.0, 0.0]
    """

    tail: float = 0.005
    width_share: float = 0.25
    magnitude_share: float = 0.25

    def fit(self, features: Mapping[str, FloatArray]) -> RangeGuard:
        """Learn the trained ranges.

        Parameters
        ----------
        features : mapping of str to ndarray, shape (point,)

        Returns
        -------
        RangeGuard

        Raises
        ------
        TrainingError
            If there is no feature or no point.
        """
        if not features or not len(next(iter(features.values()))):
            raise TrainingError(
                "no point to learn a trained range from",
                remedy="check that the training regions have valid cells",
            )
        matrix = np.column_stack(list(features.values()))
        low, high = np.quantile(matrix, [self.tail, 1.0 - self.tail], axis=0)
        magnitude = np.maximum(np.abs(low), np.abs(high))
        margin = self.width_share * (high - low) + self.magnitude_share * magnitude
        # A feature that was zero throughout has no scale of its own.
        margin = np.where(margin > 0.0, margin, 1.0)
        self.names = tuple(features)
        self.lower: FloatArray = low - margin
        self.upper: FloatArray = high + margin
        self.margin: FloatArray = margin
        return self

    def trust(self, xp: Any, features: Mapping[str, Any]) -> Any:
        """Return the trust of every point.

        Parameters
        ----------
        xp : namespace
            Array namespace: NumPy or the graph.
        features : mapping of str to array

        Returns
        -------
        array
            Between 0 and 1.
        """
        total: Any = 0.0
        for number, name in enumerate(self.names):
            lower = float(self.lower[number])
            upper = float(self.upper[number])
            value = features[name]
            outside = xp.maximum(xp.maximum(lower - value, value - upper), 0.0)
            total = total + outside * (1.0 / float(self.margin[number]))
        return xp.maximum(1.0 - total, 0.0)

    def ranges(self) -> dict[str, tuple[float, float]]:
        """Return the trained range of each feature, in its own units."""
        return {
            name: (float(self.lower[number]), float(self.upper[number]))
            for number, name in enumerate(self.names)
        }
