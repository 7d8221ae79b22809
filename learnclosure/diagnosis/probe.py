"""A short look at an ensemble: a few times, some members, a window of the grid."""

from __future__ import annotations

import math
import time
from collections.abc import Sequence
from dataclasses import fields as dataclass_fields
from dataclasses import replace
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.moments import EnsembleSource
from learnclosure.ensemble.grid import Grid

FloatArray = npt.NDArray[np.float64]
Window = tuple[slice, slice]
"""Rows and columns of the fine grid."""

MOST_CELLS = 20_000
"""Coarse cells, all layers together, that a window holds at most."""
MOST_SIDE = 96
MOST_MEMBERS = 16
MOST_TIMES = 8
MOST_BYTES = 2e9
"""Bytes of fields that are looked at; two times at least, whatever their size."""
RECORDED_CELLS = 2_000
"""Coarse cells a layer whose departures are noted, evenly spread."""
SAMPLE_SIDE = 12


def _best_start(wet: npt.NDArray[np.int64], height: int, width: int) -> tuple[int, int]:
    """Place a window where most of it is sea; the first of equal ones."""
    total = np.pad(wet.cumsum(axis=0).cumsum(axis=1), ((1, 0), (1, 0)))
    inside = (
        total[height:, width:]
        - total[:-height, width:]
        - total[height:, :-width]
        + total[:-height, :-width]
    )
    row, column = np.unravel_index(int(inside.argmax()), inside.shape)
    return int(row), int(column)


def choose_window(coarsening: Coarsening, most_side: int | None = None) -> Window:
    """Choose a window of the grid with as much sea as possible.

    Parameters
    ----------
    coarsening : Coarsening
    most_side : int, optional
        Coarse cells along a side at most; as many as a short look allows if not given.

    Returns
    -------
    Window
        Whole blocks of the fine grid.
    """
    layers, rows, columns = coarsening.geometry.mask.shape
    side = most_side or min(MOST_SIDE, max(SAMPLE_SIDE, int((MOST_CELLS / layers) ** 0.5)))
    height, width = min(rows, side), min(columns, side)
    wet = coarsening.geometry.mask.sum(axis=0, dtype=np.int64)
    row, column = _best_start(wet, height, width)
    factor = coarsening.factor
    return (
        slice(row * factor, (row + height) * factor),
        slice(column * factor, (column + width) * factor),
    )


def crop_grid(grid: Grid, window: Window) -> Grid:
    """Cut a window out of a grid; a cut axis is no longer periodic.

    Parameters
    ----------
    grid : Grid
    window : Window

    Returns
    -------
    Grid
    """
    shape = grid.geometry.mask.shape[1:]
    rows, columns = window
    whole_y, whole_x = (
        len(range(*part.indices(size))) == size for part, size in zip(window, shape, strict=True)
    )

    def cut(owner: Any) -> dict[str, Any]:
        return {
            item.name: value[..., rows, columns]
            for item in dataclass_fields(owner)
            if isinstance(value := getattr(owner, item.name), np.ndarray)
            and value.ndim > 1
            and value.shape[-2:] == shape
        }

    geometry = replace(
        grid.geometry,
        **cut(grid.geometry),
        periodic_x=grid.geometry.periodic_x and whole_x,
        periodic_y=grid.geometry.periodic_y and whole_y,
    )
    changed = {**cut(grid), "geometry": geometry, "x": grid.x[columns], "y": grid.y[rows]}
    return replace(grid, **changed)


class _Part:
    """Part of an ensemble; whatever it does not change is the ensemble's own."""

    def __init__(self, ensemble: EnsembleSource, grid: Grid, members: int, times: int) -> None:
        self._ensemble = ensemble
        self.name = ensemble.name
        self.split = ensemble.split
        self.grid = grid
        self.member_labels = ensemble.member_labels[:members]
        self.times = ensemble.times[:times]
        self.tracers = ensemble.tracers
        self.withheld_tracers = ensemble.withheld_tracers
        self.units = ensemble.units
        self.has_buoyancy = ensemble.has_buoyancy
        self.assumptions = ensemble.assumptions

    def __getattr__(self, name: str) -> Any:
        # Asked for only what is not set above; a content checksum would read everything, and
        # reading by rows would pass by what is noted here.
        if name.startswith("_") or name in ("input_sha256", "fields_of"):
            raise AttributeError(name)
        return getattr(self._ensemble, name)


class Sample(_Part):
    """A few fields kept in memory, on a small window.

    Parameters
    ----------
    ensemble : EnsembleSource
    grid : Grid
        Of the small window.
    kept : sequence of dict of str to ndarray, shape (member, layer, y, x)
        Fields of the first times.
    """

    def __init__(
        self, ensemble: EnsembleSource, grid: Grid, kept: Sequence[dict[str, FloatArray]]
    ) -> None:
        members = len(next(iter(kept[0].values())))
        super().__init__(ensemble, grid, members, len(kept))
        self._kept = kept

    def fields(self, time: int) -> dict[str, FloatArray]:
        """Return the fields of one time."""
        return self._kept[time]


class Probe(_Part):
    """The first times of an ensemble on a window, noting what passes by.

    Each time is read once, however much is asked of the probe afterwards.

    Parameters
    ----------
    ensemble : EnsembleSource
    coarsening : Coarsening
        Of the whole grid.

    Attributes
    ----------
    reading : list of float, s
        Time each reading took.
    first : dict of str to ndarray, shape (member, layer, y, x)
        Fields of the first time on the window, of all members of the probe.
    """

    def __init__(self, ensemble: EnsembleSource, coarsening: Coarsening) -> None:
        self.window = choose_window(coarsening)
        grid = crop_grid(ensemble.grid, self.window)
        members = len(ensemble.member_labels)
        layers, rows, columns = ensemble.grid.shape
        names = 2 + len(ensemble.tracers) + len(ensemble.withheld_tracers)
        one = 8.0 * members * layers * rows * columns * names
        times = min(len(ensemble.times), max(2, min(MOST_TIMES, int(MOST_BYTES / one))))
        super().__init__(ensemble, grid, min(members, MOST_MEMBERS), times)
        self.coarsening = Coarsening(grid, coarsening.factor)
        self.reading: list[float] = []
        self.first: dict[str, FloatArray] = {}
        self._small = choose_window(self.coarsening, SAMPLE_SIDE)
        self._kept: list[dict[str, FloatArray]] = []
        self._recorded: dict[str, list[FloatArray]] = {}

    def fields(self, time_number: int) -> dict[str, FloatArray]:
        """Read one time, keep the window and note departures from the ensemble mean."""
        start = time.perf_counter()
        found = self._ensemble.fields(time_number)
        self.reading.append(time.perf_counter() - start)
        members = len(self.member_labels)
        rows, columns = self.window
        part = {name: values[:members, ..., rows, columns] for name, values in found.items()}
        if not self.first:
            self.first = part
        if len(self._kept) < 2:
            rows, columns = self._small
            small = {name: values[..., rows, columns].copy() for name, values in part.items()}
            self._kept.append(small)
        for name in ("x_velocity", "y_velocity", *self.tracers):
            departure = self.coarsening.mean(part[name] - part[name].mean(axis=0))
            flat = departure.reshape(*departure.shape[:2], -1)
            step = math.ceil(flat.shape[-1] / RECORDED_CELLS)
            self._recorded.setdefault(name, []).append(flat[..., ::step].copy())
        return part

    @property
    def sample(self) -> Sample:
        """What was kept of the first two times."""
        return Sample(self._ensemble, crop_grid(self.grid, self._small), self._kept)

    def departures(self, name: str) -> FloatArray:
        """Return departures from the ensemble mean, shape (time, member, layer, cell)."""
        return np.stack(self._recorded[name])
