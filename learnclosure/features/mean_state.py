"""The mean state of a region as a host sees it, in plain NumPy arrays."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry
from learnclosure.errors import RoleError
from learnclosure.quantities import MEAN_STATE

FloatArray = npt.NDArray[np.float64]

OPTIONAL = ("eddy_kinetic_energy", "reduced_gravity")


@dataclass(frozen=True)
class MeanState:
    """Mean fields of one region on its coarse grid; layers from the top down.

    Attributes
    ----------
    geometry : Geometry
        Cell widths in m, sea mask and periodic axes.
    x_velocity, y_velocity : ndarray, shape (layer, y, x), m s-1
        Zero on land.
    layer_thickness : ndarray, shape (layer, y, x), m
        Zero on land.
    reduced_gravity : ndarray, shape (layer - 1, y, x), m s-2
        At the interface below each layer but the last.
    coriolis_parameter : ndarray, shape (y, x), s-1
    planetary_beta_x, planetary_beta_y : ndarray, shape (y, x), m-1 s-1
    sea_floor_depth : ndarray, shape (y, x), m
    eddy_kinetic_energy : ndarray or None, shape (layer, y, x), m2 s-2
        Only for closures whose host carries it.
    """

    geometry: Geometry
    x_velocity: FloatArray
    y_velocity: FloatArray
    layer_thickness: FloatArray
    reduced_gravity: FloatArray
    coriolis_parameter: FloatArray
    planetary_beta_x: FloatArray
    planetary_beta_y: FloatArray
    sea_floor_depth: FloatArray
    eddy_kinetic_energy: FloatArray | None = None

    @classmethod
    def from_mapping(
        cls, arrays: Mapping[str, npt.ArrayLike], attributes: Mapping[str, Any]
    ) -> MeanState:
        """Collect the mean state from arrays named as in ``quantities.MEAN_STATE``.

        Parameters
        ----------
        arrays : mapping of str to array-like
            Fields on (layer, y, x), (interface, y, x) or (y, x), in SI units. Values
            that are not finite are taken as land.
        attributes : mapping
            ``periodic`` names the periodic axes: ``"x y"``, ``"x"``, ``"y"`` or ``""``.

        Returns
        -------
        MeanState

        Raises
        ------
        RoleError
            If a field is missing or the fields do not fit each other.
        """
        needed = [name for name in MEAN_STATE if name not in OPTIONAL]
        missing = [name for name in needed if name not in arrays]
        if missing:
            raise RoleError(
                "mean fields are missing",
                found=", ".join(sorted(str(name) for name in arrays)) or "no variables",
                expected=", ".join(missing),
                remedy="add them in SI units under these names",
            )
        fields = {
            name: np.nan_to_num(np.asarray(arrays[name], dtype=np.float64), nan=0.0)
            for name in MEAN_STATE
            if name in arrays
        }
        shape = fields["x_velocity"].shape
        if len(shape) != 3:
            raise RoleError(
                "a mean field has the wrong shape",
                where="x_velocity",
                found=shape,
                expected="(layer, y, x)",
                remedy="give one mean field without member or time dimension",
            )
        sizes = {"layer": shape[0], "interface": shape[0] - 1, "y": shape[1], "x": shape[2]}
        if "reduced_gravity" not in fields and shape[0] == 1:
            fields["reduced_gravity"] = np.zeros((0, *shape[1:]))
        if "reduced_gravity" not in fields:
            raise RoleError(
                "mean fields are missing",
                expected="reduced_gravity",
                remedy="add it on (interface, y, x) in m s-2",
            )
        for name, values in fields.items():
            expected = tuple(sizes[dim] for dim in MEAN_STATE[name].dims)
            if values.shape != expected:
                raise RoleError(
                    "a mean field has the wrong shape",
                    where=name,
                    found=values.shape,
                    expected=expected,
                    remedy="give every field on the grid of x_velocity",
                )
        periodic = str(attributes.get("periodic", "")).split()
        mask = fields.pop("wet_share") > 0.0
        geometry = Geometry(
            dx=fields.pop("cell_width_x"),
            dy=fields.pop("cell_width_y"),
            mask=mask,
            periodic_x="x" in periodic,
            periodic_y="y" in periodic,
        )
        return cls(geometry=geometry, **fields)

    @property
    def thickness(self) -> FloatArray:
        """Layer thickness, 1 m where there is no sea, so that it can divide; (layer, y, x)."""
        wet = self.geometry.mask & (self.layer_thickness > 0.0)
        return np.where(wet, self.layer_thickness, 1.0)

    @property
    def interface_wet(self) -> npt.NDArray[np.bool_]:
        """True where both layers at an interface are sea; (layer - 1, y, x)."""
        mask = self.geometry.mask
        return np.asarray(mask[:-1] & mask[1:])

    @property
    def interface_spacing(self) -> FloatArray:
        """Distance between the middles of the layers at an interface, m; (layer - 1, y, x)."""
        return 0.5 * (self.thickness[:-1] + self.thickness[1:])
