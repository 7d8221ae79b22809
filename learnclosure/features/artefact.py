"""Writing the mean-flow inputs and features of a region as ``features.nc``."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import xarray as xr

from learnclosure.atomic import atomic_path
from learnclosure.features.inputs import compute_inputs, input_flags
from learnclosure.features.mean_state import MeanState
from learnclosure.features.point_features import EVERY_GROUP, point_features
from learnclosure.quantities import FEATURES, INPUTS, Quantity


def _annotated(values: np.ndarray, quantity: Quantity) -> xr.Variable:
    attributes = quantity.attributes()
    attributes["parity"] = quantity.parity
    if quantity.topic:
        attributes["feature_group"] = quantity.topic
    if quantity.validity:
        attributes["comment"] = quantity.validity
    attributes["locality"] = quantity.locality
    if quantity.source:
        attributes["references"] = quantity.source
    return xr.Variable(("layer", "y", "x"), values, attributes)


def features_dataset(statistics: xr.Dataset) -> xr.Dataset:
    """Compute inputs, features and validity flags from the mean state of a region.

    Parameters
    ----------
    statistics : xarray.Dataset
        Contents of ``statistics.nc``.

    Returns
    -------
    xarray.Dataset
        Every input, feature and flag on (layer, y, x); NaN on land. Vectors stand in the
        frame of the potential vorticity gradient.
    """
    arrays = {str(name): np.asarray(statistics[name].values) for name in statistics.variables}
    state = MeanState.from_mapping(arrays, dict(statistics.attrs))
    inputs = compute_inputs(state)
    energy = state.eddy_kinetic_energy is not None
    features = point_features(np, inputs, False, EVERY_GROUP)
    if energy:
        features |= point_features(np, inputs, True, EVERY_GROUP)
    wet = state.geometry.mask
    variables: dict[str, xr.Variable] = {}
    for table, fields in ((INPUTS, inputs), (FEATURES, features)):
        for name, values in fields.items():
            variables[f"feature_{name}" if name in variables else name] = _annotated(
                np.where(wet, values, np.nan), table[name]
            )
    for name, flag in input_flags(state).items():
        variables[name] = xr.Variable(
            ("layer", "y", "x"),
            np.broadcast_to(flag, wet.shape).astype(np.int8),
            {
                "long_name": f"1 where a stand-in was used: {name.replace('_', ' ')}",
                "units": "1",
            },
        )
    kept = ("Conventions", "region", "split", "vertical", "periodic")
    attributes = {key: statistics.attrs[key] for key in kept if key in statistics.attrs}
    attributes["frame"] = "pv-gradient"
    attributes["title"] = f"mean-flow features of the region {statistics.attrs.get('region', '')}"
    coordinates = {name: statistics[name].variable for name in ("layer", "y", "x")}
    return xr.Dataset(variables, coordinates, attributes)


def write_features(statistics: xr.Dataset, path: Path) -> None:
    """Write ``features.nc`` of a region.

    Parameters
    ----------
    statistics : xarray.Dataset
        Contents of ``statistics.nc``.
    path : Path

    Raises
    ------
    OutputError
        If it cannot be written.
    """
    dataset = features_dataset(statistics)
    encoding = {str(name): {"_FillValue": None} for name in dataset.coords}
    with atomic_path(path) as temporary:
        dataset.to_netcdf(temporary, engine="h5netcdf", encoding=encoding)
