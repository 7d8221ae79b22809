"""The grid of an ensemble, put together from what its parts say."""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry, Grid
from learnclosure.ensemble.horizontal import read_coordinates, read_latitude, read_metric
from learnclosure.ensemble.layout import LayoutReader
from learnclosure.ensemble.rotation import read_rotation
from learnclosure.ensemble.vertical import (
    cell_kind,
    read_depth,
    read_reduced_gravity,
    read_thickness,
)
from learnclosure.errors import GridError


def build_grid(reader: LayoutReader, mask: npt.NDArray[np.bool_], top_last: bool) -> Grid:
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
    coordinates = read_coordinates(reader)
    latitude = read_latitude(reader, coordinates)
    metric = read_metric(reader, coordinates)
    periodic_x, periodic_y = reader.periodic()
    thickness = read_thickness(reader, mask, top_last)
    rotation = read_rotation(reader, metric, latitude, np.asarray(mask.any(axis=0)))
    return Grid(
        x=metric.x,
        y=metric.y,
        geometry=Geometry(metric.dx, metric.dy, mask, periodic_x, periodic_y),
        layer_thickness=thickness,
        reduced_gravity=read_reduced_gravity(reader, mask, top_last),
        coriolis_parameter=rotation.coriolis_parameter,
        planetary_beta_x=rotation.beta_x,
        planetary_beta_y=rotation.beta_y,
        sea_floor_depth=read_depth(reader, thickness),
        vertical=cell_kind(reader),
    )
