"""What a coarse model lacks: total flux on the coarse grid minus the flux of coarse means.

With block means ``[c]`` and unbiased covariances over members, the mean of ``[uc]`` minus
the unbiased flux of the coarse means is, identically::

    <[uc]> - [u][c] of the mean = cov([u], [c]) + <[uc] - [u][c]>

the ensemble's covariance of block means and the mean over members of each block's own
covariance. The first needs no more than the moments of block means; the second is added
like any flux within. Averages weighted by thickness take block means ``[hc]/[h]`` and
weigh members by ``[h]``.
"""

from __future__ import annotations

import numpy as np

from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.moment_layout import HORIZONTAL, THICKNESS, Layout
from learnclosure.diagnosis.moment_types import Fields, FloatArray


def block_fields(fields: Fields, layout: Layout, coarsening: Coarsening) -> dict[str, Fields]:
    """Average members over blocks and keep the covariances within blocks.

    Parameters
    ----------
    fields : dict of str to ndarray, shape (member, layer, y, x)
    layout : Layout
        What is summed of the fields as they are.
    coarsening : Coarsening

    Returns
    -------
    dict of str to dict of str to ndarray, shape (member, layer, coarse y, coarse x)
        ``moments``, block means with ``<field>_within_<axis>``; and ``bolus``, plain block
        means of velocity and thickness, where averages are weighted by thickness.
    """
    weight: FloatArray | None = None
    if layout.weighting == "thickness":
        weight = np.asarray(fields[THICKNESS], dtype=np.float64)
    total = None if weight is None else coarsening.mean(weight)

    def block_mean(values: FloatArray) -> FloatArray:
        if weight is None or total is None:
            return coarsening.mean(values)
        summed = coarsening.mean(np.where(weight > 0.0, weight * values, 0.0))
        return np.asarray(summed / np.where(total > 0.0, total, 1.0))

    wide = {name: np.asarray(values, dtype=np.float64) for name, values in fields.items()}
    result = {name: block_mean(wide[name]) for name in layout.fields}
    departure = {
        name: wide[name] - coarsening.spread(result[name])
        for name in (*layout.velocities, *layout.scalars)
    }
    for first, second in layout.pairs:
        name = f"{second}_within_{first.partition('_')[0]}"
        own = block_mean(departure[first] * departure[second])
        result[name] = result[name] + own if name in result else own
    if total is None:
        return {"moments": {**result}}
    result[THICKNESS] = total
    plain = {THICKNESS: total}
    for axis in HORIZONTAL:
        plain[axis] = coarsening.mean(wide[axis])
        name = f"{THICKNESS}_within_{axis[0]}"
        plain[name] = total * (result[axis] - plain[axis])
        result[name] = plain[name]
    return {"moments": {**result}, "bolus": {**plain}}
