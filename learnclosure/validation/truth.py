"""What a region's statistics offer to be predicted: eddy fluxes of whole and half ensembles."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry
from learnclosure.errors import TrainingError
from learnclosure.quantities import TENSOR_COMPONENTS

if TYPE_CHECKING:
    import xarray as xr

FloatArray = npt.NDArray[np.float64]


@dataclass(frozen=True)
class FluxTruth:
    """Mean gradients and eddy fluxes that a transport tensor should connect.

    Attributes
    ----------
    region : str
        Name of the region.
    tracers : tuple of str
        Tracers scored.
    withheld : bool
        True if none of them took part in the inversion.
    geometry : Geometry
        Cell widths, sea mask and periodic axes.
    weights : ndarray, shape (layer, y, x), m2
        Sea area of each cell where the tensor is determined, zero elsewhere.
    gradient, flux : ndarray, shape (tracer, 2, layer, y, x)
        Of the full ensemble; tracer units per metre and times metre per second.
    half_flux : ndarray or None, shape (half, tracer, 2, layer, y, x)
        Eddy flux of each half of the members; None with fewer than four members.
    half_tensor : ndarray or None, shape (half, 4, layer, y, x), m2 s-1
        Transport tensor of each half, components xx, xy, yx, yy.
    """

    region: str
    tracers: tuple[str, ...]
    withheld: bool
    geometry: Geometry
    weights: FloatArray
    gradient: FloatArray
    flux: FloatArray
    half_flux: FloatArray | None
    half_tensor: FloatArray | None


def _array(statistics: xr.Dataset, name: str) -> FloatArray:
    if name not in statistics:
        raise TrainingError(
            f"variable '{name}' is missing",
            where=f"statistics of region '{statistics.attrs.get('region', '?')}'",
            remedy="run 'learnclosure diagnose' again",
        )
    return np.asarray(statistics[name].values, dtype=np.float64)


def _vectors(statistics: xr.Dataset, tracers: tuple[str, ...], kind: str) -> FloatArray:
    """Stack components into (..., tracer, 2, layer, y, x); what is undetermined becomes zero."""
    stacked = np.stack(
        [
            np.stack(
                [_array(statistics, f"{tracer}_{kind.format(axis=axis)}") for axis in "xy"], axis=-4
            )
            for tracer in tracers
        ],
        axis=-5,
    )
    return np.nan_to_num(stacked, nan=0.0)


def region_geometry(statistics: xr.Dataset) -> Geometry:
    """Return the horizontal geometry a region's statistics live on.

    Parameters
    ----------
    statistics : xarray.Dataset
        One region's statistics.

    Returns
    -------
    Geometry
    """
    periodic = str(statistics.attrs.get("periodic", "")).split()
    return Geometry(
        dx=_array(statistics, "cell_width_x"),
        dy=_array(statistics, "cell_width_y"),
        mask=_array(statistics, "wet_share") > 0.0,
        periodic_x="x" in periodic,
        periodic_y="y" in periodic,
    )


def flux_truth(statistics: xr.Dataset) -> FluxTruth:
    """Gather what a region offers to be predicted.

    Withheld tracers are scored if there are any, otherwise all tracers.

    Parameters
    ----------
    statistics : xarray.Dataset
        One region's statistics.

    Returns
    -------
    FluxTruth

    Raises
    ------
    TrainingError
        If a variable is missing or no cell has a determined tensor.
    """
    region = str(statistics.attrs.get("region", "?"))
    withheld = tuple(str(statistics.attrs.get("withheld_tracers", "")).split())
    tracers = withheld or tuple(str(statistics.attrs.get("tracers", "")).split())
    geometry = region_geometry(statistics)
    valid = (np.nan_to_num(_array(statistics, "valid")) > 0.5) & geometry.mask
    weights = np.where(valid, geometry.area * _array(statistics, "wet_share"), 0.0)
    if not valid.any() or not tracers:
        raise TrainingError(
            "no cell of the region has a determined transport tensor and a tracer to score",
            where=f"statistics of region '{region}'",
            remedy="add members, snapshots or tracers",
        )
    half_flux = half_tensor = None
    if f"{tracers[0]}_eddy_flux_x_halves" in statistics:
        half_flux = _vectors(statistics, tracers, "eddy_flux_{axis}_halves")
        half_tensor = np.stack(
            [_array(statistics, f"{name}_halves") for name in TENSOR_COMPONENTS], axis=1
        )
    return FluxTruth(
        region=region,
        tracers=tracers,
        withheld=bool(withheld),
        geometry=geometry,
        weights=weights,
        gradient=_vectors(statistics, tracers, "gradient_{axis}"),
        flux=_vectors(statistics, tracers, "eddy_flux_{axis}"),
        half_flux=half_flux,
        half_tensor=half_tensor,
    )


def down_gradient_flux(tensor: FloatArray, gradient: FloatArray) -> FloatArray:
    """Eddy flux ``J = -K grad C`` that a transport tensor carries.

    Parameters
    ----------
    tensor : ndarray, shape (4, layer, y, x), m2 s-1
        Components xx, xy, yx, yy; cells where one is not finite carry nothing.
    gradient : ndarray, shape (..., 2, layer, y, x)
        Mean tracer gradient, tracer units per metre.

    Returns
    -------
    ndarray, shape (..., 2, layer, y, x)
        Tracer units times metre per second.
    """
    known = np.isfinite(tensor).all(axis=0)
    xx, xy, yx, yy = np.where(known, tensor, 0.0)
    along_x, along_y = gradient[..., 0, :, :, :], gradient[..., 1, :, :, :]
    return np.stack([-(xx * along_x + xy * along_y), -(yx * along_x + yy * along_y)], axis=-4)


def interior(weights: FloatArray, geometry: Geometry) -> FloatArray:
    """Keep the weight of cells whose sea neighbours all count, zero elsewhere.

    A divergence reaches one cell each way; beside a cell whose tensor is undetermined
    it would compare a made-up flux.

    Parameters
    ----------
    weights : ndarray, shape (layer, y, x)
    geometry : Geometry

    Returns
    -------
    ndarray, shape (layer, y, x)
    """
    missing = geometry.mask & (weights <= 0.0)
    spread = missing.copy()
    for axis, periodic in ((-1, geometry.periodic_x), (-2, geometry.periodic_y)):
        for step in (1, -1):
            shifted = np.roll(missing, step, axis=axis)
            if not periodic:
                edge = np.moveaxis(shifted, axis, 0)
                edge[0 if step > 0 else -1] = False
            spread |= shifted
    return np.where(spread, 0.0, weights)
