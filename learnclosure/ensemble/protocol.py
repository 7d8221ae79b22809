"""What an ensemble offers to whoever averages or diagnoses it."""

from __future__ import annotations

from typing import Protocol

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Grid

FloatArray = npt.NDArray[np.float64]


class EnsembleSource(Protocol):
    """What the diagnosis asks of an ensemble; ``learnclosure.Ensemble`` offers it.

    ``active`` are further scalars whose eddy flux is wanted, ``left_out_gradients`` uniform
    gradients they leave out. A source may also have ``weighted``, true if averages are
    weighted by the field ``thickness``, and ``gaps``, true if members may be missing at
    places, as in layers that outcrop.
    """

    name: str
    split: str
    grid: Grid
    member_labels: tuple[int | str, ...]
    times: FloatArray
    tracers: tuple[str, ...]
    withheld_tracers: tuple[str, ...]
    units: dict[str, str]
    has_buoyancy: bool
    active: tuple[str, ...]
    left_out_gradients: dict[str, FloatArray]
    assumptions: tuple[str, ...]

    def fields(self, time: int) -> dict[str, FloatArray]:
        """Return all fields of one time, shape (member, layer, y, x)."""
        ...
