"""The Coriolis parameter and its gradient."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry, gradient
from learnclosure.ensemble.horizontal import EARTH_RADIUS, Metric
from learnclosure.ensemble.layout import LayoutReader
from learnclosure.errors import GridError

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

EARTH_ROTATION = 7.292115e-5
"""Angular velocity of the Earth, rad s-1."""


class Rotation(NamedTuple):
    """Rotation felt by the fluid, all of shape (y, x).

    Attributes
    ----------
    coriolis_parameter : ndarray, s-1
    beta_x, beta_y : ndarray, m-1 s-1
        Gradient of the Coriolis parameter along the model axes.
    """

    coriolis_parameter: FloatArray
    beta_x: FloatArray
    beta_y: FloatArray


def _sea_values(values: FloatArray, sea: BoolArray, where: str) -> FloatArray:
    """Return values with zero on land; refuse gaps in the sea."""
    gaps = int(np.count_nonzero(sea & ~np.isfinite(values)))
    if gaps:
        raise GridError(
            "the Coriolis parameter or the latitude is missing in the sea",
            where=where,
            found=f"{gaps} cells without a value",
            remedy="correct the variable, or give 'coriolis' and 'beta' as numbers",
        )
    return np.where(np.isfinite(values), values, 0.0)


def _differences(
    coriolis: FloatArray, known: BoolArray, metric: Metric
) -> tuple[FloatArray, FloatArray]:
    """Gradient of a Coriolis parameter given as a field, by finite differences."""
    geometry = Geometry(metric.dx, metric.dy, known[None], False, False)
    along_x, along_y = gradient(coriolis[None], geometry)
    return along_x[0], along_y[0]


def read_rotation(
    reader: LayoutReader, metric: Metric, latitude: FloatArray | None, sea: BoolArray
) -> Rotation:
    """Find the Coriolis parameter and its gradient.

    In this order: the study's ``coriolis`` (a number at ``y = 0`` with ``beta``, or a
    variable), the variable with the standard name ``coriolis_parameter``, or the latitude
    by ``f = 2 Omega sin(latitude)``, ``beta = 2 Omega cos(latitude) / a``.

    Parameters
    ----------
    reader : LayoutReader
    metric : Metric
    latitude : ndarray, shape (y, x), radians, or None
    sea : ndarray of bool, shape (y, x)

    Returns
    -------
    Rotation

    Raises
    ------
    GridError
        If nothing tells the Coriolis parameter, or it is missing in the sea.
    """
    beta = reader.layout.beta
    if beta is None and "planetary_beta" in reader.dataset.attrs:
        beta = float(reader.dataset.attrs["planetary_beta"])
    given = reader.layout.coriolis
    if given is None:
        given = reader.standard("coriolis_parameter")
    zero = np.zeros((reader.rows, reader.columns))
    if isinstance(given, (int, float)):
        if beta is None:
            reader.assumptions.append("the Coriolis parameter is uniform, since no beta is given")
            beta = 0.0
        coriolis = reader.surface(float(given) + beta * metric.y, "coriolis")
        return Rotation(coriolis, zero, zero + beta)
    field, where = _field(reader, given, latitude)
    coriolis = _sea_values(field, sea, where)
    if beta is not None:
        return Rotation(coriolis, zero, zero + beta)
    if latitude is not None and given is None and _rows_are_parallels(latitude):
        return Rotation(coriolis, zero, 2.0 * EARTH_ROTATION * np.cos(latitude) / EARTH_RADIUS)
    reader.assumptions.append("beta is the gradient of the Coriolis parameter over the grid")
    return Rotation(coriolis, *_differences(coriolis, np.isfinite(field), metric))


def _field(
    reader: LayoutReader, given: str | None, latitude: FloatArray | None
) -> tuple[FloatArray, str]:
    """Return the Coriolis parameter on (y, x) and where it comes from."""
    if given is not None:
        where = f"{reader.where}: {given}"
        return reader.surface(reader.value(given, "s-1", "coriolis"), "coriolis"), where
    if latitude is not None:
        return 2.0 * EARTH_ROTATION * np.sin(latitude), f"{reader.where}: latitude"
    raise GridError(
        "the Coriolis parameter is unknown",
        where=reader.where,
        expected="a variable with the standard_name coriolis_parameter, or a latitude",
        remedy="name 'coriolis' and 'beta', or 'latitude', under [ensemble.grid]",
    )


def _rows_are_parallels(latitude: FloatArray) -> bool:
    return bool(np.isfinite(latitude).all() and (latitude == latitude[:, :1]).all())
