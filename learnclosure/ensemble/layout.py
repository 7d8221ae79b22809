"""What one member and the study say of the grid, read in SI units."""

from __future__ import annotations

from typing import Any

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.ensemble.axes import Axes
from learnclosure.ensemble.roles import require_variable
from learnclosure.ensemble.units import conversion
from learnclosure.errors import GridError
from learnclosure.study import EnsembleTable

FloatArray = npt.NDArray[np.float64]


class LayoutReader:
    """Reads what the grid consists of from one member and the study.

    Parameters
    ----------
    table : EnsembleTable
    dataset : xarray.Dataset
        First member.
    axes : Axes
    where : object
        Its file, for messages.

    Attributes
    ----------
    assumptions : list of str
        What was assumed where neither files nor study say.
    used : list of str
        Variables read, in which members must agree.
    """

    def __init__(
        self, table: EnsembleTable, dataset: xr.Dataset, axes: Axes, where: object
    ) -> None:
        self.table = table
        self.layout = table.grid
        self.dataset = dataset
        self.axes = axes
        self.where = where
        self.rows = dataset.sizes[axes.y]
        self.columns = dataset.sizes[axes.x]
        self.layers = dataset.sizes[axes.layer] if axes.layer else 1
        self.assumptions: list[str] = []
        self.used: list[str] = []

    def units_of(self, name: str, default: str) -> str:
        """Return the units a variable has, or note that ``default`` was assumed.

        Parameters
        ----------
        name, default : str

        Returns
        -------
        str
        """
        units = self.dataset[name].attrs.get("units")
        if units is None:
            self.assumptions.append(f"'{name}' is in {default}, since it has no units")
            return default
        return str(units)

    def value(self, name: str, units: str, part: str) -> FloatArray:
        """Return a variable's values in SI units.

        Parameters
        ----------
        name, units, part : str
            Variable, SI units and the study key that names it.

        Returns
        -------
        ndarray

        Raises
        ------
        RoleError, UnitError
            If it is missing or its units do not convert.
        """
        require_variable(self.dataset, name, part, self.where)
        variable = self.dataset[name]
        if self.axes.time is not None and self.axes.time in variable.dims:
            self.assumptions.append(f"'{name}' stays as it is at the first time")
            variable = variable.isel({self.axes.time: 0})
        self.used.append(name)
        change = conversion(self.units_of(name, units), units, f"{self.where}: {name}")
        return change(np.asarray(variable.values, dtype=np.float64))

    def standard(self, standard_name: str) -> str | None:
        """Return the name of the variable with a CF standard name, if there is just one.

        Of several the one that does not vary in time is taken.

        Parameters
        ----------
        standard_name : str

        Returns
        -------
        str or None
        """
        found = [
            str(name)
            for name, variable in self.dataset.variables.items()
            if variable.attrs.get("standard_name") == standard_name
        ]
        fixed = [name for name in found if self.axes.time not in self.dataset[name].dims]
        left = found if len(found) == 1 else fixed
        return left[0] if len(left) == 1 else None

    def surface(self, values: Any, part: str) -> FloatArray:
        """Spread a number, one value per row or column, or a field over (y, x).

        Parameters
        ----------
        values : array_like
        part : str
            Study key, for the message; ``"dx"`` alone runs along x when it is a list.

        Returns
        -------
        ndarray, shape (y, x)

        Raises
        ------
        GridError
            If the shape does not fit.
        """
        array = np.asarray(values, dtype=np.float64)
        if array.ndim == 1 and part != "dx":
            array = array[:, None]
        try:
            return np.array(np.broadcast_to(array, (self.rows, self.columns)))
        except ValueError:
            raise GridError(
                f"'{part}' does not fit the grid",
                where=self.where,
                found=array.shape,
                expected=(self.rows, self.columns),
                remedy=f"correct '{part}' under [ensemble.grid]",
            ) from None

    def periodic(self) -> tuple[bool, bool]:
        """Tell whether x and y are periodic.

        Returns
        -------
        tuple of bool
        """
        if self.layout.periodic is not None:
            named = {str(axis) for axis in self.layout.periodic}
        else:
            named = set(str(self.dataset.attrs.get("periodic", "")).split())
            if "periodic" not in self.dataset.attrs:
                self.assumptions.append("no axis is periodic, since nothing says otherwise")
        return "x" in named, "y" in named
