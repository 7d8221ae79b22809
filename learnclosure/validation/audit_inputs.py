"""Inputs a closure is audited on: real ones, far-fetched ones and ones that lack something."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry
from learnclosure.quantities import INPUTS, Quantity

FloatArray = npt.NDArray[np.float64]
Inputs = Mapping[str, FloatArray]

SAMPLE = 2000
"""Points the symmetry checks and the extreme inputs are made of."""


@dataclass(frozen=True)
class AuditRegion:
    """One region a closure is audited on.

    Attributes
    ----------
    name : str
    inputs : mapping of str to ndarray, shape (point,)
        Point inputs in SI units.
    layer, row, column : ndarray of int, shape (point,)
        Cell of each point.
    geometry : Geometry
    """

    name: str
    inputs: Inputs
    layer: npt.NDArray[Any]
    row: npt.NDArray[Any]
    column: npt.NDArray[Any]
    geometry: Geometry

    def on_grid(self, tensor: FloatArray) -> FloatArray:
        """Spread point tensors, shape (point, 4), over the grid; NaN elsewhere.

        Parameters
        ----------
        tensor : ndarray, shape (point, 4)

        Returns
        -------
        ndarray, shape (4, layer, y, x)
        """
        field = np.full((4, *self.geometry.mask.shape), np.nan)
        field[:, self.layer, self.row, self.column] = tensor.T
        return field


def _take(inputs: Inputs, points: npt.NDArray[Any]) -> dict[str, FloatArray]:
    return {name: np.asarray(values[points], dtype=np.float64) for name, values in inputs.items()}


def join_inputs(parts: Sequence[Inputs]) -> dict[str, FloatArray]:
    """Put the points of several sets of inputs one after the other."""
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


def sample_inputs(regions: Sequence[AuditRegion], seed: int) -> dict[str, FloatArray]:
    """Draw points from all regions.

    Parameters
    ----------
    regions : sequence of AuditRegion
    seed : int

    Returns
    -------
    dict of str to ndarray, shape (point,)
    """
    everything = join_inputs([region.inputs for region in regions])
    size = len(next(iter(everything.values())))
    random = np.random.default_rng(seed)
    return _take(everything, np.sort(random.permutation(size)[:SAMPLE]))


def extreme_inputs(
    sample: Inputs, seed: int, table: Mapping[str, Quantity] = INPUTS
) -> dict[str, FloatArray]:
    """Make inputs far outside anything trained on.

    Every input of every point is multiplied by its own factor between 1e-4 and 1e4, and
    those that may have either sign change it at random.

    Parameters
    ----------
    sample : mapping of str to ndarray, shape (point,)
    seed : int
    table : mapping of str to Quantity, optional
        Rows that declare the parities; scalars keep their sign, whole numbers their value.

    Returns
    -------
    dict of str to ndarray, shape (point,)
    """
    random = np.random.default_rng(seed)
    wild: dict[str, FloatArray] = {}
    for name, values in sample.items():
        factor = 10.0 ** random.uniform(-4.0, 4.0, values.shape)
        sign = random.choice([-1.0, 1.0], values.shape)
        if table[name].parity != "scalar":
            factor = factor * sign
        wild[name] = values.copy() if name == "layer_index" else values * factor
    return wild


def degenerate_inputs(sample: Inputs) -> dict[str, FloatArray]:
    """Make inputs that lack something: each input zero in turn, all zero, no motion, f = 0.

    Parameters
    ----------
    sample : mapping of str to ndarray, shape (point,)

    Returns
    -------
    dict of str to ndarray, shape (point,)
    """
    few = _take(sample, np.arange(min(8, len(next(iter(sample.values()))))))
    motion = [
        name for name in few if "velocity" in name or name.startswith(("shear", "jet", "axis"))
    ]
    vanishing = [[name] for name in few] + [list(few), motion]
    cases = []
    for names in vanishing:
        gone = {name: np.zeros_like(values) for name, values in few.items() if name in names}
        cases.append({**few, **gone})
    return join_inputs(cases)
