"""``statistics.nc``: CF attributes, units and names on everything the diagnosis found."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.atomic import atomic_path
from learnclosure.quantities import (
    DEPTH_STATISTICS,
    LAYER_FIELD,
    MEAN_STATE,
    STATISTICS,
    Quantity,
)

FloatArray = npt.NDArray[np.float64]

_FLUX = "time mean of the ensemble covariance of velocity and"


def named_quantity(name: str) -> Quantity:
    """Return the row of a mean-state or statistic quantity."""
    return {**MEAN_STATE, **STATISTICS, **DEPTH_STATISTICS}[name]


def times_units(units: str, factor: str) -> str:
    """Units of a tracer, which may be a pure number, times others."""
    return factor if units == "1" else f"{units} {factor}"


class StatisticsBuilder:
    """Collects variables with their attributes and builds the dataset.

    Parameters
    ----------
    x, y : ndarray, m
        Centres of the coarse cells.
    layers : int
    """

    def __init__(self, x: FloatArray, y: FloatArray, layers: int) -> None:
        self.variables: dict[str, xr.Variable] = {}
        self.coordinates: dict[str, xr.Variable] = {
            name: xr.Variable(
                (name,),
                np.asarray(values, dtype=np.float64),
                {
                    # Without this name checkers take any horizontal axis for degrees.
                    "standard_name": f"projection_{name}_coordinate",
                    "long_name": f"distance along {name}",
                    "units": "m",
                    "axis": name.upper(),
                },
            )
            for name, values in (("x", x), ("y", y))
        }
        self.coordinates["layer"] = xr.Variable(
            ("layer",),
            np.arange(1, layers + 1, dtype=np.int32),
            {
                "standard_name": "model_level_number",
                "long_name": "layer, counted from the top",
                "units": "1",
                "positive": "down",
                "axis": "Z",
            },
        )

    def add(
        self,
        name: str,
        values: npt.NDArray[Any],
        dims: tuple[str, ...],
        long_name: str,
        units: str,
        **more: str,
    ) -> None:
        """Add a variable with its long name and units."""
        attributes = {"long_name": long_name, "units": units, **more}
        self.variables[name] = xr.Variable(dims, values, attributes)

    def add_named(
        self, name: str, values: npt.NDArray[Any], suffix: str = "", about: str = ""
    ) -> None:
        """Add a variable of the table of quantities, or a companion of one.

        Parameters
        ----------
        name : str
            Row of the table.
        values : ndarray
            On the row's dimensions, or on (half, ...) if the suffix is ``_halves``.
        suffix, about : str, optional
            Ending of a companion's name and the words its long name begins with.
        """
        row = named_quantity(name)
        attributes = row.attributes()
        if about:
            attributes.pop("standard_name", None)
            attributes["long_name"] = f"{about} {attributes['long_name']}"
        if row.source:
            attributes["references"] = row.source
        dims = ("half", *row.dims) if suffix == "_halves" else row.dims
        self.variables[name + suffix] = xr.Variable(dims, values, attributes)

    def add_tracer(
        self,
        tracer: str,
        units: str,
        flux: FloatArray,
        gradient: FloatArray,
        *,
        halves: bool = False,
    ) -> None:
        """Add eddy flux and mean gradient of a tracer.

        Parameters
        ----------
        tracer, units : str
        flux, gradient : ndarray, shape (2, layer, y, x) or (half, 2, layer, y, x)
        halves : bool, optional
            Whether they are of the two halves of the members.
        """
        dims = ("half", *LAYER_FIELD) if halves else LAYER_FIELD
        suffix, about = ("_halves", "of each half of the members, ") if halves else ("", "")
        flux_units, slope_units = times_units(units, "m s-1"), times_units(units, "m-1")
        for number, axis in enumerate("xy"):
            part = (slice(None), number) if halves else (number,)
            self.add(
                f"{tracer}_eddy_flux_{axis}{suffix}", flux[part], dims,
                f"{about}eddy flux of {tracer} along {axis}, {_FLUX} {tracer}", flux_units,
            )  # fmt: skip
            self.add(
                f"{tracer}_gradient_{axis}{suffix}", gradient[part], dims,
                f"{about}gradient along {axis} of mean {tracer}", slope_units,
            )  # fmt: skip

    def build(self, attributes: Mapping[str, Any]) -> xr.Dataset:
        """Return the dataset with global attributes."""
        return xr.Dataset(self.variables, self.coordinates, dict(attributes))


def cautions_of(statistics: xr.Dataset) -> list[str]:
    """Return what a diagnosis says of its own weaknesses, one sentence each."""
    return [said for said in str(statistics.attrs.get("cautions", "")).split("; ") if said]


def read_cautions(path: Path) -> list[str]:
    """Read what a diagnosis says of its own weaknesses.

    Parameters
    ----------
    path : Path
        A ``statistics.nc``.

    Returns
    -------
    list of str
        One sentence each.
    """
    with xr.open_dataset(path, engine="h5netcdf") as statistics:
        return cautions_of(statistics)


def write_statistics(statistics: xr.Dataset, path: Path) -> None:
    """Write ``statistics.nc`` atomically, the same bytes for the same contents.

    Parameters
    ----------
    statistics : xarray.Dataset
    path : Path

    Raises
    ------
    OutputError
        If it cannot be written.
    """
    encoding: dict[str, dict[str, Any]] = {}
    for name, variable in statistics.variables.items():
        missing = np.nan if np.issubdtype(variable.dtype, np.floating) else None
        coordinate = name in statistics.coords
        encoding[str(name)] = {"_FillValue": None if coordinate else missing}
    with atomic_path(path) as temporary:
        statistics.to_netcdf(temporary, engine="h5netcdf", encoding=encoding)
