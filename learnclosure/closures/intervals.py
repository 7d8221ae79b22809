"""Half-widths of predicted tensors, calibrated by region.

For each region left out of training the conformal order statistic of the scores
``|K - Khat| / (trace / 2 + floor)`` is taken, component by component in the local frame;
the half-width uses the largest over the regions. If the regions at hand and a new one are
exchangeable, then with probability at least ``n / (n + 1)`` for ``n`` left-out regions
the new region's own order statistic is no larger, and the share of its cells that a
half-width misses, component by component, is at most the miscoverage asked for. Cells of
one region are not independent, so no promise is made cell by cell. Half-widths are carried
to model axes by interval arithmetic, which can only widen them.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.errors import TrainingError

FloatArray = npt.NDArray[np.float64]

FRAME_COMPONENTS = ("nn", "nt", "tn", "tt")


def conformal_order_statistic(scores: FloatArray, miscoverage: float) -> float:
    """Return the score that covers a new, exchangeable one.

    The ``k``-th smallest of ``n`` scores with ``k = ceil((n + 1) (1 - miscoverage))``
    covers a further one with probability at least ``1 - miscoverage`` (Vovk, Gammerman
    and Shafer 2005, Algorithmic Learning in a Random World).

    Parameters
    ----------
    scores : ndarray, shape (n,)
    miscoverage : float
        Between 0 and 1.

    Returns
    -------
    float
        Infinite where ``n`` is too small for the miscoverage.

    Examples
    --------
    >>> import numpy as np
    >>> conformal_order_statistic(np.arange(1.0, 100.0), 0.1)
    90.0
    >>> conformal_order_statistic(np.arange(8.0), 0.1)
    inf
    """
    count = len(scores)
    # The guard keeps (99 + 1) * 0.9 at 90 when its product rounds up.
    rank = math.ceil((count + 1) * (1.0 - miscoverage) - 1e-9)
    if rank > count:
        return math.inf
    return float(np.partition(scores, rank - 1)[rank - 1])


@dataclass(frozen=True)
class HalfWidths:
    """Calibrated half-widths in the local frame.

    Attributes
    ----------
    multipliers : ndarray, shape (4,), 1
        Half-widths of (nn, nt, tn, tt) divided by the local scale; the largest over
        the regions.
    by_region : dict of str to ndarray, shape (4,), 1
        Order statistics of each left-out region.
    miscoverage : float
        Share of cells of a new region a half-width may miss.
    floor : float, m2 s-1
        Part of the local scale ``trace / 2 + floor``.
    """

    multipliers: FloatArray
    by_region: Mapping[str, FloatArray]
    miscoverage: float
    floor: float

    @property
    def guarantee(self) -> str:
        """What the half-widths promise, in one sentence."""
        count = len(self.by_region)
        return (
            f"if a new region is exchangeable with the {count} left out in turn, then with "
            f"probability at least {count}/{count + 1} each component in the local frame "
            f"lies within its half-width in at least {1.0 - self.miscoverage:.0%} of the cells"
        )

    def as_record(self) -> dict[str, Any]:
        """Return a JSON-safe description; infinite values become null."""

        def plain(values: FloatArray) -> dict[str, float | None]:
            return {
                name: float(value) if math.isfinite(value) else None
                for name, value in zip(FRAME_COMPONENTS, values, strict=True)
            }

        return {
            "multipliers": plain(self.multipliers),
            "by_region": {name: plain(values) for name, values in self.by_region.items()},
            "miscoverage": self.miscoverage,
            "guarantee": self.guarantee,
        }


def calibrate_half_widths(
    predicted: FloatArray,
    true: FloatArray,
    region: npt.NDArray[np.str_],
    miscoverage: float,
    floor: float,
) -> HalfWidths:
    """Calibrate half-widths from predictions for regions left out of training.

    Parameters
    ----------
    predicted, true : ndarray, shape (point, 4), m2 s-1
        Components (nn, nt, tn, tt) in the local frame; each prediction by a closure that
        has not seen the point's region.
    region : ndarray of str, shape (point,)
    miscoverage : float
        Share of cells of a new region a half-width may miss.
    floor : float, m2 s-1
        Part of the local scale ``trace / 2 + floor``.

    Returns
    -------
    HalfWidths

    Raises
    ------
    TrainingError
        If there is no point or the shapes disagree.
    """
    if predicted.shape != true.shape or predicted.shape != (len(region), 4) or not len(region):
        raise TrainingError(
            "half-widths need predictions and truth of the same points",
            found=f"shapes {predicted.shape}, {true.shape} and {region.shape}",
            expected="(point, 4), (point, 4) and (point,) with at least one point",
        )
    scale = 0.5 * (predicted[:, 0] + predicted[:, 3]) + floor
    scores = np.abs(true - predicted) / scale[:, None]
    by_region = {
        str(name): np.array(
            [conformal_order_statistic(scores[region == name, c], miscoverage) for c in range(4)]
        )
        for name in np.unique(region)
    }
    multipliers = np.max(np.stack(list(by_region.values())), axis=0)
    return HalfWidths(multipliers, by_region, miscoverage, floor)
