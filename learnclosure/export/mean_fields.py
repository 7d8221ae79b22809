"""Files of mean fields in, files of predictions out; h5netcdf only."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import h5netcdf
import numpy as np
import numpy.typing as npt

from learnclosure.atomic import atomic_path
from learnclosure.errors import RoleError, SourceError, UnitError
from learnclosure.features.mean_state import OPTIONAL, MeanState
from learnclosure.quantities import INTERFACE_FIELD, LAYER_FIELD, MEAN_STATE, OUTPUTS, SURFACE_FIELD

FloatArray = npt.NDArray[np.float64]

COORDINATES = {
    "layer": {"long_name": "layer from the top down", "units": "1", "positive": "down"},
    "y": {"standard_name": "projection_y_coordinate", "units": "m", "axis": "Y"},
    "x": {"standard_name": "projection_x_coordinate", "units": "m", "axis": "X"},
}
SPELLINGS = (("**", ""), ("^", ""), (".", " "), ("*", " "))
"""Ways to write powers and products of units, and how they are read."""


@dataclass(frozen=True)
class MeanFields:
    """A mean state and where it lies.

    Attributes
    ----------
    state : MeanState
    coordinates : dict of str to ndarray
        Of the dimensions ``layer``, ``y`` and ``x``, where the file has them.
    periodic : str
        Names of the periodic axes.
    """

    state: MeanState
    coordinates: dict[str, npt.NDArray[Any]]
    periodic: str


def read_mean_fields(path: Path, *, energy: bool) -> MeanFields:
    """Read mean fields.

    Parameters
    ----------
    path : Path
    energy : bool
        Whether eddy kinetic energy must be among them.

    Returns
    -------
    MeanFields

    Raises
    ------
    SourceError
        If the file cannot be read.
    RoleError
        If a field is missing or fields do not fit each other.
    UnitError
        If a field is not in SI units.
    """
    if not path.is_file():
        raise SourceError("does not exist", where=path, remedy="give a file of mean fields")
    try:
        with h5netcdf.File(path, "r") as file:
            _require_fields(path, file, energy)
            arrays = {
                name: _field(path, file, name) for name in MEAN_STATE if name in file.variables
            }
            coordinates = {
                name: np.asarray(file.variables[name][...])
                for name in COORDINATES
                if name in file.variables
            }
            periodic = _text(file.attrs.get("periodic", ""))
    except (OSError, KeyError) as error:
        raise SourceError(
            "cannot be read as a NetCDF-4 file",
            where=path,
            found=str(error).splitlines()[0],
            remedy="give an intact NetCDF-4 file of mean fields",
        ) from None
    state = MeanState.from_mapping(arrays, {"periodic": periodic})
    _require_finite(path, arrays, state)
    return MeanFields(state, coordinates, periodic)


def _require_fields(path: Path, file: Any, energy: bool) -> None:
    needed = [name for name in MEAN_STATE if name not in OPTIONAL]
    if energy:
        needed.append("eddy_kinetic_energy")
    missing = [name for name in needed if name not in file.variables]
    if missing:
        raise RoleError(
            f"mean fields are missing: {', '.join(missing)}",
            where=path,
            found=", ".join(sorted(file.variables)) or "no variables",
            remedy="add them in SI units under these names",
        )


def _require_finite(path: Path, arrays: Mapping[str, FloatArray], state: MeanState) -> None:
    """Insist on a value of every field wherever there is sea."""
    sea = state.geometry.mask
    places = {
        LAYER_FIELD: sea,
        SURFACE_FIELD: sea.any(axis=0),
        INTERFACE_FIELD: state.interface_wet,
    }
    for name, values in arrays.items():
        gaps = int(np.sum(places[MEAN_STATE[name].dims] & ~np.isfinite(values)))
        if gaps:
            raise RoleError(
                "values are missing where there is sea",
                where=f"{path}: {name}",
                found=f"{gaps} cells",
                remedy="fill them, or set wet_share to zero there",
            )


def _text(value: Any) -> str:
    return value.decode() if isinstance(value, bytes) else str(value)


def _field(path: Path, file: Any, name: str) -> FloatArray:
    """Return a variable unpacked, in double, with missing values as not-a-number."""
    variable = file.variables[name]
    attributes = variable.attrs
    _require_units(path, name, attributes)
    raw = np.asarray(variable[...])
    if not np.issubdtype(raw.dtype, np.number):
        raise RoleError("is not numeric", where=f"{path}: {name}", found=raw.dtype)
    values = raw.astype(np.float64)
    for key in ("_FillValue", "missing_value"):
        if key in attributes:
            values[np.isin(raw, np.asarray(attributes[key]))] = np.nan
    if "scale_factor" in attributes:
        values *= float(np.ravel(attributes["scale_factor"])[0])
    if "add_offset" in attributes:
        values += float(np.ravel(attributes["add_offset"])[0])
    return values


def _require_units(path: Path, name: str, attributes: Mapping[str, Any]) -> None:
    expected = MEAN_STATE[name].units
    if "units" not in attributes:
        raise UnitError(
            "has no units", where=f"{path}: {name}", expected=expected, remedy="state its units"
        )
    found = _text(attributes["units"])
    plain = found
    for spelling, meaning in SPELLINGS:
        plain = plain.replace(spelling, meaning)
    plain = re.sub(r"/\s*([a-zA-Z]+)(\d*)", lambda part: f" {part[1]}-{part[2] or 1}", plain)
    if sorted(plain.split()) != sorted(expected.split()):
        raise UnitError(
            "is not in SI units",
            where=f"{path}: {name}",
            found=found,
            expected=expected,
            remedy="convert it before predicting",
        )


def write_predictions(
    path: Path,
    fields: MeanFields,
    outputs: Mapping[str, FloatArray],
    attributes: Mapping[str, str],
) -> None:
    """Write predictions on the grid of the mean fields.

    Parameters
    ----------
    path : Path
    fields : MeanFields
    outputs : mapping of str to ndarray, shape (layer, y, x)
        Named as in ``quantities.OUTPUTS``; not-a-number on land.
    attributes : mapping of str to str
        Global attributes beside the conventions.

    Raises
    ------
    OutputError
        If the file cannot be written.
    """
    sizes = dict(zip(LAYER_FIELD, fields.state.geometry.mask.shape, strict=True))
    with atomic_path(path) as temporary, h5netcdf.File(temporary, "w") as file:
        file.attrs["Conventions"] = "CF-1.11"
        for key, text in {**attributes, "periodic": fields.periodic}.items():
            file.attrs[key] = text
        file.dimensions = sizes
        for name, values in fields.coordinates.items():
            if values.shape == (sizes[name],):
                variable = file.create_variable(name, (name,), dtype=values.dtype, data=values)
                variable.attrs.update(COORDINATES[name])
        for name, values in outputs.items():
            variable = file.create_variable(
                name, LAYER_FIELD, dtype="f8", data=values, fillvalue=np.float64(np.nan)
            )
            variable.attrs.update(OUTPUTS[name].attributes())
