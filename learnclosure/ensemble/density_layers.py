"""An ensemble on levels seen on layers: each member and time remapped before averaging."""

from __future__ import annotations

from dataclasses import replace
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.active import interface_height
from learnclosure.ensemble.grid import Grid
from learnclosure.ensemble.layer_quantity import (
    KEY,
    edges_in_si,
    layer_quantity,
)
from learnclosure.ensemble.protocol import EnsembleSource
from learnclosure.ensemble.remapping import inverted_columns, to_layers
from learnclosure.ensemble.seawater import buoyancy_from_density
from learnclosure.errors import SourceError, StudyError
from learnclosure.study import LayerSettings

FloatArray = npt.NDArray[np.float64]

TIMES_OF_CENSUS = 8
"""Times looked at to choose edges, spread over the record."""
BINS_OF_CENSUS = 20_000
NOT_REMAPPED = ("thickness", "z_velocity")


class _Survey(NamedTuple):
    """What a first pass over the quantity alone finds.

    Attributes
    ----------
    thickness : ndarray, shape (layer, y, x), m
        Mean over members and times.
    share : ndarray, shape (layer, y, x)
        Share of members and times that have the layer there.
    inverted : float
        Share of columns of all members and times that have an inversion.
    """

    thickness: FloatArray
    share: FloatArray
    inverted: float


class DensityLayers:
    """Members on levels, remapped to layers; offers what the diagnosis asks of an ensemble.

    A first pass reads the quantity alone and finds where layers exist; ``fields`` then
    remaps one time of all members.

    Parameters
    ----------
    source : EnsembleSource
        An open ensemble on levels.
    settings : LayerSettings
    weighted : bool, optional
        Whether averages are weighted by thickness. If not, a layer counts as sea only where
        all members have it at all times.

    Attributes
    ----------
    edges : ndarray, shape (layer - 1,)
        Values of the quantity at the interfaces, from the top down.
    valid_share : ndarray, shape (layer, y, x)
        Share of members and times in which the layer is there; it outcrops in the rest.
    weighted : bool
    active : tuple of str
        Thickness and interface height: what else acts on the flow is bound to levels.
    grid : Grid
        Layers with their mean thickness; land where a layer is too thin or too rare.

    Raises
    ------
    StudyError
        If the ensemble is on layers already, or the edges separate no water.
    RoleError
        If the ensemble does not hold what the quantity needs.
    SourceError
        If the quantity is not finite in the sea or a level has negative thickness.
    """

    def __init__(
        self, source: EnsembleSource, settings: LayerSettings, *, weighted: bool = True
    ) -> None:
        if source.grid.vertical != "levels":
            raise StudyError(
                "layers are remapped from levels",
                where=f"region '{source.name}': {KEY}",
                found="an ensemble on layers",
                expected="vertical = 'levels'",
                remedy="remove [diagnosis.layers], or correct 'vertical' under [ensemble.grid]",
            )
        self._source = source
        self._settings = settings
        self.weighted = weighted
        self.name, self.split = source.name, source.split
        self.member_labels, self.times = source.member_labels, source.times
        self.tracers, self.withheld_tracers = source.tracers, source.withheld_tracers
        self.active: tuple[str, ...] = ("thickness", "interface_height")
        self.left_out_gradients: dict[str, FloatArray] = {}
        self._quantity = layer_quantity(source, settings)
        # All that follows lets the quantity grow downward.
        self._sign = 1.0 if self._grows_downward() else -1.0
        notes = list(self._quantity.notes)
        self.edges = self._edges(notes)
        survey = self._survey()
        self.valid_share = survey.share
        self._inverted = survey.inverted
        self._from_density = not source.has_buoyancy and self._quantity.units == "kg m-3"
        self.has_buoyancy = source.has_buoyancy or self._from_density
        self.units = {**source.units, "thickness": "m", "interface_height": "m"}
        self.grid = self._layered_grid(survey)
        notes += self._notes(survey)
        self.assumptions = (*source.assumptions, *notes)

    @cached_property
    def input_sha256(self) -> str | None:
        """SHA-256 over names and contents of all files, where there are files."""
        return getattr(self._source, "input_sha256", None)

    @property
    def attributes(self) -> dict[str, Any]:
        """What an artefact records of the layers."""
        return {
            "layer_quantity": f"{self._quantity.notes[0]}, in {self._quantity.units}",
            "layer_edges": self.edges,
            "layer_reconstruction": self._settings.reconstruction,
            "layer_inverted_columns_share": self._inverted,
        }

    def fields(self, time: int) -> dict[str, FloatArray]:
        """Read all members of one time and remap them.

        Parameters
        ----------
        time : int
            Number of the time.

        Returns
        -------
        dict of str to ndarray, shape (member, layer, y, x)
            Averages over the layers of each member of all that the source has, ``thickness``
            and ``interface_height`` in m; zero where a layer is not there.
        """
        levels = dict(self._source.fields(time))
        thickness = self._thickness(levels)
        quantity = self._read(time, thickness)
        if self._from_density:
            levels["buoyancy"] = buoyancy_from_density(self._sign * quantity)
        names = [name for name in levels if name not in NOT_REMAPPED]
        members = len(quantity)
        shape = (members, *self.grid.shape)
        layers = {name: np.empty(shape) for name in (*names, *self.active)}
        for member in range(members):
            stacked = np.stack([levels[name][member] for name in names])
            means, found = self._remap(stacked, quantity[member], thickness[member])
            for name, values in zip(names, means, strict=True):
                layers[name][member] = np.where(self.grid.geometry.mask, values, 0.0)
            layers["thickness"][member] = np.where(self.grid.geometry.mask, found, 0.0)
            height = interface_height(found, self.grid.sea_floor_depth)
            layers["interface_height"][member] = np.where(self.grid.geometry.mask, height, 0.0)
        return layers

    def _remap(
        self, fields: FloatArray, quantity: FloatArray, thickness: FloatArray
    ) -> tuple[FloatArray, FloatArray]:
        return to_layers(
            fields,
            quantity,
            np.ascontiguousarray(thickness),
            self._sign * self.edges,
            linear=self._settings.reconstruction == "linear",
        )

    def _thickness(self, levels: dict[str, FloatArray] | None = None) -> FloatArray:
        """Thickness of all levels of all members, zero on land."""
        shape = (len(self.member_labels), *self._source.grid.shape)
        own = None if levels is None else levels.get("thickness")
        if own is None:
            return np.broadcast_to(self._source.grid.layer_thickness, shape)
        negative = int(np.count_nonzero(~(own >= 0.0)))
        if negative:
            raise SourceError(
                "levels have negative thickness",
                where=f"region '{self.name}': thickness",
                found=f"{negative} cells",
                expected="thicknesses in m that are not negative",
                remedy="correct the variable named by 'thickness'",
            )
        return own

    def _read(self, time: int, thickness: FloatArray) -> FloatArray:
        """Read the quantity of all members, growing downward."""
        values = self._quantity.read(time)
        wrong = int(np.count_nonzero(~np.isfinite(values) & (thickness > 0.0)))
        if wrong:
            raise SourceError(
                f"{self._quantity.name} is not finite in the sea",
                where=f"region '{self.name}': {KEY} quantity",
                found=f"{wrong} cells at time number {time}",
                expected="a finite value wherever there is sea",
                remedy="check temperature and salinity, their units and kinds",
            )
        return np.ascontiguousarray(self._sign * np.where(thickness > 0.0, values, 0.0))

    def _grows_downward(self) -> bool:
        known = self._quantity.grows_downward
        if known is not None:
            return known
        mask = self._source.grid.geometry.mask
        values = np.where(mask, self._quantity.read(0), 0.0)
        steps = np.where(mask[1:] & mask[:-1], values[:, 1:] - values[:, :-1], 0.0)
        total = float(steps.sum())
        if total == 0.0 or not np.isfinite(total):
            raise StudyError(
                "the quantity of layers does not vary with depth",
                where=f"region '{self.name}': {KEY} quantity",
                found=self._quantity.name,
                expected="a quantity that grows or falls downward",
                remedy="choose another one",
            )
        return total > 0.0

    def _edges(self, notes: list[str]) -> FloatArray:
        """Edges from the top down, from the study or for equal volumes."""
        if self._settings.count is None:
            given, more = edges_in_si(self._settings, self._quantity)
            notes += more
            return self._sign * np.sort(self._sign * given)
        edges = self._sign * self._census(self._settings.count)
        shown = ", ".join(f"{edge:.6g}" for edge in edges)
        notes.append(f"edges of layers chosen for equal volumes: {shown} {self._quantity.units}")
        return edges

    def _census(self, count: int) -> FloatArray:
        """Edges, growing, between layers of equal volume over all members and some times."""
        last = len(self.times) - 1
        chosen = np.unique(np.linspace(0, last, min(TIMES_OF_CENSUS, last + 1)).round().astype(int))
        thickness = self._thickness()
        volume = thickness * self._source.grid.geometry.area
        wet = volume > 0.0
        ranges = []
        for time in chosen:
            values = self._read(int(time), thickness)[wet]
            ranges.append((float(values.min()), float(values.max())))
        low, high = min(part[0] for part in ranges), max(part[1] for part in ranges)
        total = np.zeros(BINS_OF_CENSUS)
        for time in chosen:
            values = self._read(int(time), thickness)[wet]
            total += np.histogram(values, BINS_OF_CENSUS, (low, high), weights=volume[wet])[0]
        below = np.concatenate([[0.0], np.cumsum(total)]) / total.sum()
        bounds = np.linspace(low, high, BINS_OF_CENSUS + 1)
        edges = np.interp(np.arange(1, count) / count, below, bounds)
        # Closer edges lie within one bin, where they are made up by interpolation.
        if not (np.diff(edges) > (high - low) / BINS_OF_CENSUS).all():
            raise StudyError(
                "the sea does not hold as many layers of equal volume",
                where=f"region '{self.name}': {KEY} count",
                found=count,
                expected="fewer layers than the quantity has distinct values",
                remedy="lower 'count' or give 'edges'",
            )
        return np.asarray(edges)

    def _survey(self) -> _Survey:
        """Pass once over the quantity of all times."""
        wet_columns = self._source.grid.layer_thickness.sum(axis=0) > 0.0
        nothing = np.empty((0, *self._source.grid.shape))
        shape = (len(self.edges) + 1, *self._source.grid.shape[1:])
        total, present, inverted = np.zeros(shape), np.zeros(shape), 0
        thickness = self._thickness()
        for time in range(len(self.times)):
            quantity = self._read(time, thickness)
            inverted += int(np.count_nonzero(inverted_columns(quantity, thickness)))
            for values, own in zip(quantity, thickness, strict=True):
                found = self._remap(nothing, values, own)[1]
                total += found
                present += found > 0.0
        samples = len(self.times) * len(self.member_labels)
        columns = max(int(np.count_nonzero(wet_columns)), 1)
        return _Survey(total / samples, present / samples, inverted / (samples * columns))

    def _layered_grid(self, survey: _Survey) -> Grid:
        grid = self._source.grid
        least = self._settings.least_share if self.weighted else 1.0
        mask = (survey.thickness >= self._settings.least_thickness) & (survey.share >= least)
        if int(np.count_nonzero((survey.thickness > 0.0).any(axis=(1, 2)))) < 2:
            raise StudyError(
                "the edges of layers separate no water",
                where=f"region '{self.name}': {KEY} edges",
                found=", ".join(f"{edge:g}" for edge in self.edges) + f" {self._quantity.units}",
                expected=f"values that {self._quantity.name} takes in the sea",
                remedy="check their units and the reference pressure",
            )
        return replace(
            grid,
            geometry=replace(grid.geometry, mask=mask),
            layer_thickness=np.where(mask, survey.thickness, 0.0),
            reduced_gravity=None,
            vertical="layers",
        )

    def _notes(self, survey: _Survey) -> list[str]:
        mask, area = self.grid.geometry.mask, self.grid.geometry.area
        notes = []
        if survey.inverted > 0.0:
            notes.append(
                f"{self._quantity.name} is not monotonic with depth in {survey.inverted:.2%} of "
                "the columns; their water is assigned to layers by value"
            )
        volume = survey.thickness * area
        left_out = float(volume[~mask].sum() / volume.sum())
        notes.append(
            f"{left_out:.2%} of the water lies where its layer is thinner than "
            f"{self._settings.least_thickness:g} m in the mean or outcrops too often, and is "
            "left out"
        )
        for layer, (wet, share) in enumerate(zip(mask, survey.share, strict=True), start=1):
            if wet.any() and float(share[wet].min()) < 1.0:
                mean = float((share * area)[wet].sum() / area[wet].sum())
                notes.append(
                    f"layer {layer} outcrops: it is there in {mean:.1%} of members and times on "
                    f"average and in {float(share[wet].min()):.1%} at least"
                )
        return notes
