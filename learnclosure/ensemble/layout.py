"""The grid of an ensemble: metric, mask, vertical cells, rotation."""

from __future__ import annotations

from typing import Any, Literal

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.ensemble.axes import Axes
from learnclosure.ensemble.grid import Geometry, Grid
from learnclosure.ensemble.roles import require_variable
from learnclosure.ensemble.units import conversion
from learnclosure.errors import GridError
from learnclosure.study import EnsembleTable

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

EARTH_RADIUS = 6.371e6
EARTH_ROTATION = 7.292115e-5


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
        if self.axes.time in variable.dims:
            variable = variable.isel({self.axes.time: 0})
        said = str(variable.attrs.get("units", units))
        change = conversion(said, units, f"{self.where}: {name}")
        return change(np.asarray(variable.values, dtype=np.float64))

    def standard(self, standard_name: str) -> str | None:
        """Name of the variable with a CF standard name, if there is just one."""
        found = [
            str(name)
            for name, variable in self.dataset.variables.items()
            if variable.attrs.get("standard_name") == standard_name
        ]
        return found[0] if len(found) == 1 else None

    def surface(self, values: Any, part: str) -> FloatArray:
        """Spread values over (y, x): a number, one value per row or column, or a field."""
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
        """Tell whether x and y are periodic."""
        if self.layout.periodic is not None:
            named = {str(axis) for axis in self.layout.periodic}
        else:
            named = set(str(self.dataset.attrs.get("periodic", "")).split())
            if not named and "periodic" not in self.dataset.attrs:
                self.assumptions.append("no axis is periodic, since nothing says otherwise")
        return "x" in named, "y" in named

    def top_last(self) -> bool:
        """Tell whether the surface is at the end of the vertical dimension."""
        if self.layout.top is not None:
            return self.layout.top == "last"
        name = self.axes.layer
        if name is None or name not in self.dataset.variables or self.layers < 2:
            return False
        values = np.asarray(self.dataset[name].values, dtype=np.float64)
        positive = str(self.dataset[name].attrs.get("positive", "")).lower()
        if positive not in ("up", "down"):
            self.assumptions.append("the first layer is the top one, since nothing says otherwise")
            return False
        return bool((values[-1] > values[0]) == (positive == "up"))

    def vertical(self) -> Literal["layers", "levels"]:
        """Tell whether vertical cells move with the fluid."""
        said = self.layout.vertical or str(self.dataset.attrs.get("vertical", ""))
        if said in ("layers", "levels"):
            return "layers" if said == "layers" else "levels"
        self.assumptions.append("vertical cells stand still (levels), since nothing says otherwise")
        return "levels"

    def flipped(self, values: FloatArray, top_last: bool) -> FloatArray:
        """Return values with the top layer first."""
        return values[::-1] if top_last else values

    def coordinates(self) -> tuple[FloatArray, FloatArray, bool]:
        """Return x, y in m, or longitude and latitude in radians and True."""
        found: list[FloatArray] = []
        angular: list[bool] = []
        for name, size in ((self.axes.x, self.columns), (self.axes.y, self.rows)):
            if name not in self.dataset.variables:
                found.append(np.full(size, np.nan))
                angular.append(False)
                continue
            units = str(self.dataset[name].attrs.get("units", "m"))
            is_angle = units.lower().startswith("deg")
            target = "radian" if is_angle else "m"
            change = conversion(units, target, f"{self.where}: {name}")
            found.append(change(np.asarray(self.dataset[name].values, dtype=np.float64)))
            angular.append(is_angle)
        return found[0], found[1], all(angular)

    def latitude(self, y: FloatArray, angular: bool) -> FloatArray | None:
        """Return latitude in radians on (y, x) if it is known."""
        given = self.layout.latitude
        if isinstance(given, float):
            return self.surface(np.radians(given), "latitude")
        if isinstance(given, str):
            return self.surface(self.value(given, "radian", "latitude"), "latitude")
        if angular:
            return self.surface(y[:, None], "latitude")
        name = self.standard("latitude")
        return None if name is None else self.surface(self.value(name, "radian", name), name)

    def widths(
        self, x: FloatArray, y: FloatArray, angular: bool
    ) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
        """Return dx, dy on (y, x) and x, y along their axes, all in m."""
        if angular:
            rows = EARTH_RADIUS * np.cos(y)[:, None] * self.spacing(x, self.axes.x)[None, :]
            dx, dy = self.surface(rows, "dx"), self.spacing(y, self.axes.y)[:, None] * EARTH_RADIUS
            x, y = EARTH_RADIUS * np.cos(np.mean(y)) * x, EARTH_RADIUS * y
            return dx, self.surface(dy, "dy"), x, y
        fields = []
        for part, coordinate, name in (("dx", x, self.axes.x), ("dy", y, self.axes.y)):
            given = getattr(self.layout, part)
            if isinstance(given, str):
                width: Any = self.value(given, "m", part)
            elif given is not None:
                width = given
            else:
                width = self.spacing(coordinate, name)
            fields.append(self.surface(width, part))
        dx, dy = fields
        if not np.isfinite(x).all():
            x = np.cumsum(dx[0]) - 0.5 * dx[0]
        if not np.isfinite(y).all():
            y = np.cumsum(dy[:, 0]) - 0.5 * dy[:, 0]
        for part, width in (("dx", dx), ("dy", dy)):
            if not (np.isfinite(width) & (width > 0.0)).all():
                raise GridError(
                    "a cell width is not positive",
                    where=f"{self.where}: {part}",
                    found=f"{np.nanmin(width):g} m at least",
                    expected="positive widths everywhere, on land too",
                    remedy=f"name '{part}' under [ensemble.grid]",
                )
        return dx, dy, x, y

    def spacing(self, values: FloatArray, name: str) -> FloatArray:
        """Widths of cells whose centres are given; the outermost as their neighbours."""
        if len(values) < 2 or not np.isfinite(values).all():
            raise GridError(
                "the cell width is unknown",
                where=f"{self.where}: {name}",
                expected="a coordinate variable of that name, or 'dx' and 'dy'",
                remedy="name 'dx' and 'dy' under [ensemble.grid]",
            )
        steps = np.diff(values)
        if not (steps > 0.0).all():
            raise GridError(
                "the coordinate does not grow along its axis",
                where=f"{self.where}: {name}",
                found=f"{values[0]:g} to {values[-1]:g}",
                expected="values that grow eastward along x and northward along y",
                remedy="reorder the file along this axis",
            )
        return np.concatenate([steps[:1], 0.5 * (steps[1:] + steps[:-1]), steps[-1:]])

    def thickness(self, mask: BoolArray, top_last: bool) -> FloatArray:
        """Return resting thicknesses in m on (layer, y, x), zero on land."""
        given = self.layout.layer_thickness
        if given is None:
            given = self.standard("cell_thickness")
        if given is None:
            raise GridError(
                "the layer thickness is unknown",
                where=self.where,
                expected="a variable with the standard_name cell_thickness",
                remedy="name 'layer_thickness' under [ensemble.grid], as a variable or in m",
            )
        if isinstance(given, str):
            values = self.value(given, "m", "layer_thickness")
        else:
            values = np.asarray(given, dtype=np.float64)
        if values.shape[:1] != (self.layers,):
            raise GridError(
                "'layer_thickness' does not fit the layers",
                where=self.where,
                found=f"{values.shape[0] if values.ndim else 1} values",
                expected=f"{self.layers}",
                remedy="correct 'layer_thickness' under [ensemble.grid]",
            )
        shaped = values.reshape(self.layers, *(values.shape[1:] or (1, 1)))
        spread = np.where(mask, self.flipped(shaped, top_last), 0.0)
        if not (spread[mask] > 0.0).all():
            raise GridError(
                "a layer in the sea has no thickness",
                where=f"{self.where}: layer_thickness",
                found=f"{np.nanmin(spread[mask]):g} m at least",
                expected="positive thicknesses in m",
                remedy="correct the variable or the list",
            )
        return spread

    def depth(self, thickness: FloatArray) -> FloatArray:
        """Return the depth of the sea floor in m on (y, x), zero on land."""
        given = self.layout.sea_floor_depth
        if given is None:
            given = self.standard("sea_floor_depth_below_geoid")
        if given is None:
            self.assumptions.append("the sea floor lies below the lowest cell that is sea")
            return np.asarray(thickness.sum(axis=0))
        values: Any = given
        if isinstance(given, str):
            values = np.nan_to_num(self.value(given, "m", "sea_floor_depth"), nan=0.0)
        sea = thickness.sum(axis=0) > 0.0
        return np.where(sea, np.abs(self.surface(values, "sea_floor_depth")), 0.0)

    def reduced_gravity(self, top_last: bool) -> FloatArray | None:
        """Return reduced gravity in m s-2 on (layer - 1, y, x) if it is fixed in time."""
        given = self.layout.reduced_gravity
        if given is None and "reduced_gravity" in self.dataset.variables:
            given = "reduced_gravity"
        if given is None:
            return None
        if isinstance(given, str):
            values = self.value(given, "m s-2", "reduced_gravity")
        else:
            values = np.asarray(given, dtype=np.float64)
        if values.shape[:1] != (self.layers - 1,):
            raise GridError(
                "'reduced_gravity' does not fit the layers",
                where=self.where,
                found=f"{values.shape[0] if values.ndim else 1} values",
                expected=f"{self.layers - 1}, one for each interface between layers",
                remedy="correct 'reduced_gravity' under [ensemble.grid]",
            )
        shaped = values.reshape(self.layers - 1, *(values.shape[1:] or (1, 1)))
        full = (self.layers - 1, self.rows, self.columns)
        return np.array(np.broadcast_to(self.flipped(shaped, top_last), full))

    def rotation(
        self, y: FloatArray, latitude: FloatArray | None
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return f in s-1 and its gradient along x and y in m-1 s-1, all on (y, x)."""
        beta: Any = self.layout.beta
        if beta is None and "planetary_beta" in self.dataset.attrs:
            beta = float(self.dataset.attrs["planetary_beta"])
        given = self.layout.coriolis
        if given is None:
            given = self.standard("coriolis_parameter")
        zero = np.zeros((self.rows, self.columns))
        if isinstance(given, str):
            coriolis = self.surface(self.value(given, "s-1", "coriolis"), "coriolis")
            if beta is None:
                beta = np.gradient(coriolis, y, axis=0) if self.rows > 1 else 0.0
                self.assumptions.append("beta is the gradient of the Coriolis parameter along y")
        elif given is not None:
            beta = beta or 0.0
            coriolis = self.surface(given + beta * y[:, None], "coriolis")
        elif latitude is not None:
            coriolis = 2.0 * EARTH_ROTATION * np.sin(latitude)
            if beta is None:
                beta = 2.0 * EARTH_ROTATION * np.cos(latitude) / EARTH_RADIUS
        else:
            raise GridError(
                "the Coriolis parameter is unknown",
                where=self.where,
                expected="a variable with the standard_name coriolis_parameter, or a latitude",
                remedy="name 'coriolis' and 'beta', or 'latitude', under [ensemble.grid]",
            )
        return coriolis, zero, self.surface(beta, "beta")


def build_grid(reader: LayoutReader, mask: BoolArray, top_last: bool) -> Grid:
    """Assemble the grid.

    Parameters
    ----------
    reader : LayoutReader
    mask : ndarray of bool, shape (layer, y, x)
        True where the tracers are sea; top layer first.
    top_last : bool
        Whether the files have the top layer last.

    Returns
    -------
    Grid

    Raises
    ------
    GridError
        If something the grid needs is missing or does not fit.
    """
    if not mask.any():
        raise GridError(
            "all cells are land",
            where=reader.where,
            found="no finite tracer value",
            expected="some sea",
            remedy="check the fill values of the tracers",
        )
    x, y, angular = reader.coordinates()
    latitude = reader.latitude(y, angular)
    dx, dy, x, y = reader.widths(x, y, angular)
    periodic_x, periodic_y = reader.periodic()
    thickness = reader.thickness(mask, top_last)
    coriolis, beta_x, beta_y = reader.rotation(y, latitude)
    return Grid(
        x=x,
        y=y,
        geometry=Geometry(dx, dy, mask, periodic_x, periodic_y),
        layer_thickness=thickness,
        reduced_gravity=reader.reduced_gravity(top_last),
        coriolis_parameter=coriolis,
        planetary_beta_x=beta_x,
        planetary_beta_y=beta_y,
        sea_floor_depth=reader.depth(thickness),
        vertical=reader.vertical(),
    )
