"""The training table: one row for each cell whose transport tensor is determined."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
import numpy.typing as npt

from learnclosure.errors import TrainingError
from learnclosure.features.inputs import compute_inputs
from learnclosure.features.mean_state import MeanState
from learnclosure.quantities import TENSOR_COMPONENTS

if TYPE_CHECKING:
    import xarray as xr

FloatArray = npt.NDArray[np.float64]
IndexArray = npt.NDArray[np.int64]
Weighting = Literal["area", "area-and-sampling"]

LARGEST_SAMPLING_RATIO = 4.0
"""Most a point may gain or lose in weight for its sampling error, as a factor."""


@dataclass(frozen=True)
class Table:
    """Points with their inputs and transport tensors, over one or more regions.

    Attributes
    ----------
    inputs : dict of str to ndarray, shape (point,)
        Physical inputs in SI units, by name.
    region : ndarray of str, shape (point,)
        Name of the region each point lies in.
    layer, row, column : ndarray of int, shape (point,)
        Place of the point in its region's grid.
    weight : ndarray, shape (point,), m2
        Area of the cell that is sea.
    tensor : ndarray, shape (point, 4), m2 s-1
        Components xx, xy, yx, yy on model axes.
    tensor_error : ndarray, shape (point, 4), m2 s-1
        Their standard errors; NaN where unknown.
    shapes : dict of str to tuple of int
        Grid shape (layer, y, x) of each region.
    """

    inputs: dict[str, FloatArray]
    region: npt.NDArray[np.str_]
    layer: IndexArray
    row: IndexArray
    column: IndexArray
    weight: FloatArray
    tensor: FloatArray
    tensor_error: FloatArray
    shapes: dict[str, tuple[int, int, int]]

    def __len__(self) -> int:
        return len(self.region)

    @property
    def regions(self) -> tuple[str, ...]:
        """Names of the regions that have points, in order of first appearance."""
        names, first = np.unique(self.region, return_index=True)
        return tuple(str(names[k]) for k in np.argsort(first))

    def select(self, mask: npt.NDArray[Any]) -> Table:
        """Return the table of some of the points.

        Parameters
        ----------
        mask : ndarray, shape (point,) of bool or of indices

        Returns
        -------
        Table
        """
        return replace(
            self,
            inputs={name: values[mask] for name, values in self.inputs.items()},
            region=self.region[mask],
            layer=self.layer[mask],
            row=self.row[mask],
            column=self.column[mask],
            weight=self.weight[mask],
            tensor=self.tensor[mask],
            tensor_error=self.tensor_error[mask],
        )

    def training_weight(self, weighting: Weighting) -> FloatArray:
        """Return the weight of each point in training, of mean one.

        Parameters
        ----------
        weighting : {"area", "area-and-sampling"}
            Area alone, or area times the inverse sampling variance of the tensor
            relative to the median of the point's layer and region, limited to a factor
            of four either way.

        Returns
        -------
        ndarray, shape (point,)
        """
        weight = self.weight / np.mean(self.weight)
        if weighting == "area":
            return weight
        variance = np.sum(self.tensor_error**2, axis=1)
        ratio = np.ones(len(self))
        for name in self.regions:
            for layer in np.unique(self.layer[self.region == name]):
                chosen = (self.region == name) & (self.layer == layer) & np.isfinite(variance)
                chosen &= variance > 0.0
                if chosen.any():
                    ratio[chosen] = np.median(variance[chosen]) / variance[chosen]
        weight = weight * np.clip(ratio, 1.0 / LARGEST_SAMPLING_RATIO, LARGEST_SAMPLING_RATIO)
        return np.asarray(weight / np.mean(weight))

    def unflatten(self, values: FloatArray, region: str) -> FloatArray:
        """Put values of one region's points back on its grid.

        Parameters
        ----------
        values : ndarray, shape (point, ...)
            For every point of the table.
        region : str

        Returns
        -------
        ndarray, shape (layer, y, x, ...)
            NaN where the table has no point.
        """
        chosen = self.region == region
        field = np.full(self.shapes[region] + values.shape[1:], np.nan)
        place = (self.layer[chosen], self.row[chosen], self.column[chosen])
        field[place] = values[chosen]
        return field


def _region_table(dataset: xr.Dataset) -> Table:
    arrays = {str(name): np.asarray(dataset[name].values) for name in dataset.variables}
    name = str(dataset.attrs["region"])
    if dataset.attrs.get("tensor_form", "local") != "local":
        raise TrainingError(
            "its tensor acts on remembered gradients, which a host does not have",
            where=name,
            found=f"form = '{dataset.attrs['tensor_form']}'",
            expected="form = 'local'",
            remedy="set [diagnosis] form = 'local' to train",
        )
    state = MeanState.from_mapping(arrays, dict(dataset.attrs))
    fields = compute_inputs(state)
    components = np.stack([arrays[c].astype(np.float64) for c in TENSOR_COMPONENTS], axis=-1)
    errors = np.stack(
        [
            np.asarray(
                arrays.get(f"{c}_standard_error", np.full(components.shape[:-1], np.nan)),
                dtype=np.float64,
            )
            for c in TENSOR_COMPONENTS
        ],
        axis=-1,
    )
    usable = (arrays["valid"] == 1) & np.isfinite(components).all(axis=-1) & state.geometry.mask
    layer, row, column = np.nonzero(usable)
    area = np.broadcast_to(state.geometry.area, usable.shape) * arrays["wet_share"]
    return Table(
        inputs={
            key: np.asarray(np.broadcast_to(values, usable.shape)[usable], dtype=np.float64)
            for key, values in fields.items()
        },
        region=np.full(len(layer), name),
        layer=layer,
        row=row,
        column=column,
        weight=np.asarray(area[usable], dtype=np.float64),
        tensor=components[usable],
        tensor_error=errors[usable],
        shapes={name: (usable.shape[0], usable.shape[1], usable.shape[2])},
    )


def table_from_statistics(datasets: Sequence[xr.Dataset]) -> Table:
    """Gather the valid points of several regions.

    Parameters
    ----------
    datasets : sequence of xarray.Dataset
        Contents of each region's ``statistics.nc``.

    Returns
    -------
    Table
        Regions in the order given. Inputs that not every region has are left out.

    Raises
    ------
    TrainingError
        If there is no region, two share a name, one has no valid point, or a tensor is
        not in its local form.
    """
    tables = [_region_table(dataset) for dataset in datasets]
    if not tables:
        raise TrainingError("no region to train on", remedy="give at least one training region")
    names = [next(iter(table.shapes)) for table in tables]
    for name, table in zip(names, tables, strict=True):
        if names.count(name) > 1:
            raise TrainingError("two regions share one name", where=name, remedy="rename one")
        if not len(table):
            raise TrainingError(
                "no cell has a determined transport tensor",
                where=name,
                remedy="check the mask and the tracers of the region",
            )
    common = [key for key in tables[0].inputs if all(key in table.inputs for table in tables[1:])]
    return Table(
        inputs={key: np.concatenate([table.inputs[key] for table in tables]) for key in common},
        region=np.concatenate([table.region for table in tables]),
        layer=np.concatenate([table.layer for table in tables]),
        row=np.concatenate([table.row for table in tables]),
        column=np.concatenate([table.column for table in tables]),
        weight=np.concatenate([table.weight for table in tables]),
        tensor=np.concatenate([table.tensor for table in tables]),
        tensor_error=np.concatenate([table.tensor_error for table in tables]),
        shapes={name: table.shapes[name] for name, table in zip(names, tables, strict=True)},
    )
