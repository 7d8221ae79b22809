"""What a region's statistics say in depth axes: slopes and, with upward velocity, 3x3 tensors."""

from __future__ import annotations

from collections.abc import Mapping
from typing import NamedTuple

import numpy as np
import numpy.typing as npt
import xarray as xr

from learnclosure.diagnosis.artefact import StatisticsBuilder, named_quantity, times_units
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.isoneutral import (
    Form,
    depth_tensor,
    isoneutral_parts,
    slopes_from_buoyancy,
    slopes_of_layers,
)
from learnclosure.diagnosis.moments import EnsembleSource, GroupMoments
from learnclosure.diagnosis.tensor import LARGEST_CONDITION_NUMBER
from learnclosure.diagnosis.tensor_3d import (
    AXES,
    condition_number_3d,
    least_squares_tensor_3d,
    normal_equations_3d,
    smooth_tensor_3d,
    vertical_gradient,
)
from learnclosure.errors import DiagnosisError
from learnclosure.study import DiagnosisSettings

FloatArray = npt.NDArray[np.float64]

LEAST_TRACERS = 3
TENSOR_PAIRS = tuple(
    (a, b, f"{row}{column}") for a, row in enumerate(AXES) for b, column in enumerate(AXES)
)


class DepthTensor(NamedTuple):
    """Tensors in depth axes and what they were made from.

    Attributes
    ----------
    smooth, least_squares : ndarray, shape (layer, y, x, 3, 3), m2 s-1
        NaN where the gradients do not determine them.
    condition : ndarray, shape (layer, y, x), 1
        Of stretched gradients.
    upward_flux, upward_gradient : dict of str to ndarray, shape (layer, y, x)
    """

    smooth: FloatArray
    least_squares: FloatArray
    condition: FloatArray
    upward_flux: dict[str, FloatArray]
    upward_gradient: dict[str, FloatArray]


def diagnose_depth_tensor(
    source: EnsembleSource,
    coarsening: Coarsening,
    whole: GroupMoments,
    gradients: Mapping[str, FloatArray],
    smoothing_length: float,
) -> DepthTensor:
    """Diagnose 3x3 tensors on levels.

    Parameters
    ----------
    source : EnsembleSource
        On levels; its fields hold ``z_velocity``.
    coarsening : Coarsening
    whole : GroupMoments
        Means and horizontal eddy fluxes of all members.
    gradients : mapping of str to ndarray, shape (2, layer, y, x)
        Of mean tracers along x and y.
    smoothing_length : float, m

    Returns
    -------
    DepthTensor

    Raises
    ------
    DiagnosisError
        If fewer than three tracers are there to determine it.
    """
    if len(source.tracers) < LEAST_TRACERS:
        raise DiagnosisError(
            "a tensor in depth axes needs three tracers with different gradients",
            where=f"region '{source.name}'",
            found=f"{len(source.tracers)} ({', '.join(source.tracers)})",
            expected="at least three tracers that are not withheld",
            remedy="name more under [ensemble.variables] tracers, or leave 'z_velocity' out",
        )
    geometry = coarsening.geometry
    thickness = coarsening.mean(source.grid.layer_thickness)
    area = geometry.area * coarsening.wet_share
    flux = whole.upward_flux
    names = (*source.tracers, *source.withheld_tracers)
    steep = {name: vertical_gradient(whole.mean[name], thickness, geometry.mask) for name in names}
    equations = normal_equations_3d(
        np.stack([np.stack([*whole.flux[name], flux[name]]) for name in source.tracers]),
        np.stack([np.stack([*gradients[name], steep[name]]) for name in source.tracers]),
        area,
    )
    condition = condition_number_3d(equations)
    valid = geometry.mask & (condition <= LARGEST_CONDITION_NUMBER)
    smooth = smooth_tensor_3d(equations, geometry, area, smoothing_length)
    return DepthTensor(
        smooth=np.where(valid[..., None, None], smooth, np.nan),
        least_squares=least_squares_tensor_3d(equations),
        condition=np.where(geometry.mask & np.isfinite(condition), condition, np.nan),
        upward_flux=flux,
        upward_gradient=steep,
    )


def add_depth_axes(
    builder: StatisticsBuilder,
    source: EnsembleSource,
    coarsening: Coarsening,
    whole: GroupMoments,
    gradients: Mapping[str, FloatArray],
    settings: DiagnosisSettings,
) -> None:
    """Add slopes and, where the upward velocity is known, tensors in depth axes.

    Parameters
    ----------
    builder : StatisticsBuilder
    source : EnsembleSource
    coarsening : Coarsening
    whole : GroupMoments
        Of all members.
    gradients : mapping of str to ndarray, shape (2, layer, y, x)
        Of mean tracers along x and y.
    settings : DiagnosisSettings

    Raises
    ------
    DiagnosisError
        If there is an upward velocity but fewer than three tracers.
    """
    slopes = _slopes(source, coarsening, whole)
    if slopes is not None:
        for axis, values in zip("xy", slopes, strict=True):
            builder.add_named(f"isoneutral_slope_{axis}", values)
    if source.grid.vertical != "levels" or "z_velocity" not in whole.mean:
        return
    found = diagnose_depth_tensor(source, coarsening, whole, gradients, settings.smoothing_length)
    for a, b, pair in TENSOR_PAIRS:
        builder.add_named(f"depth_tensor_{pair}", found.smooth[..., a, b])
        builder.add_named(f"least_squares_depth_tensor_{pair}", found.least_squares[..., a, b])
    builder.add_named("depth_condition_number", found.condition)
    if slopes is not None:
        parts = isoneutral_parts(found.smooth, slopes)
        builder.add_named("skew_diffusivity", parts.skew_diffusivity)
    for name in (*source.tracers, *source.withheld_tracers):
        units = source.units.get(name, "1")
        builder.add(
            f"{name}_eddy_flux_z", found.upward_flux[name], ("layer", "y", "x"),
            f"upward eddy flux of {name}, time mean of the ensemble covariance of upward "
            f"velocity and {name}", times_units(units, "m s-1"),
        )  # fmt: skip
        builder.add(
            f"{name}_gradient_z", found.upward_gradient[name], ("layer", "y", "x"),
            f"upward gradient of mean {name}", times_units(units, "m-1"),
        )  # fmt: skip


def _slopes(
    source: EnsembleSource, coarsening: Coarsening, whole: GroupMoments
) -> FloatArray | None:
    """Slopes of layers, or of surfaces of equal buoyancy where it is known."""
    geometry = coarsening.geometry
    thickness = coarsening.mean(source.grid.layer_thickness)
    if source.grid.vertical == "layers":
        shape = source.grid.shape
        depth = coarsening.mean(np.broadcast_to(source.grid.sea_floor_depth, shape)).max(axis=0)
        return slopes_of_layers(thickness, depth, geometry)
    if "buoyancy" not in whole.mean:
        return None
    return slopes_from_buoyancy(whole.mean["buoyancy"], thickness, geometry)


def in_depth_axes(
    statistics: xr.Dataset,
    *,
    skew_diffusivity: FloatArray | float = 0.0,
    form: Form = "small-slope",
) -> xr.Dataset:
    """Give hosts on levels what was diagnosed along layers.

    Parameters
    ----------
    statistics : xarray.Dataset
        Contents of ``statistics.nc`` of an ensemble on layers.
    skew_diffusivity : ndarray, shape (layer, y, x), or float, optional
        Coefficient of Gent and McWilliams, m2 s-1.
    form : {"small-slope", "full"}, optional

    Returns
    -------
    xarray.Dataset
        ``depth_tensor_xx`` to ``depth_tensor_zz`` at the places of the layers.
    """
    slopes = np.stack([statistics[f"isoneutral_slope_{axis}"].values for axis in "xy"])
    inside = _joined(statistics, "transport_tensor", "xy")
    whole = depth_tensor(inside, skew_diffusivity, slopes, form=form)
    return _dataset(
        statistics, {f"depth_tensor_{pair}": whole[..., a, b] for a, b, pair in TENSOR_PAIRS}
    )


def along_layers(statistics: xr.Dataset, *, form: Form = "small-slope") -> xr.Dataset:
    """Give hosts on layers what was diagnosed in depth axes.

    Parameters
    ----------
    statistics : xarray.Dataset
        Contents of ``statistics.nc`` of an ensemble on levels with upward velocity.
    form : {"small-slope", "full"}, optional

    Returns
    -------
    xarray.Dataset
        ``transport_tensor_xx`` to ``transport_tensor_yy`` along isoneutral surfaces and
        ``skew_diffusivity``.

    Raises
    ------
    DiagnosisError
        If the statistics hold no tensor in depth axes.
    """
    if "depth_tensor_zz" not in statistics:
        raise DiagnosisError(
            "the statistics hold no tensor in depth axes",
            where=f"region '{statistics.attrs.get('region', '')}'",
            expected="an ensemble on levels with an upward velocity",
            remedy="name 'z_velocity' under [ensemble.variables] and diagnose again",
        )
    slopes = np.stack([statistics[f"isoneutral_slope_{axis}"].values for axis in "xy"])
    parts = isoneutral_parts(_joined(statistics, "depth_tensor", AXES), slopes, form=form)
    values = {
        f"transport_tensor_{row}{column}": parts.tensor[..., a, b]
        for a, row in enumerate("xy")
        for b, column in enumerate("xy")
    }
    return _dataset(statistics, {**values, "skew_diffusivity": parts.skew_diffusivity})


def _joined(statistics: xr.Dataset, name: str, axes: str) -> FloatArray:
    rows = [
        np.stack([statistics[f"{name}_{row}{column}"].values for column in axes], axis=-1)
        for row in axes
    ]
    return np.stack(rows, axis=-2)


def _dataset(statistics: xr.Dataset, values: Mapping[str, FloatArray]) -> xr.Dataset:
    variables = {}
    for name, array in values.items():
        row = named_quantity(name)
        variables[name] = xr.Variable(row.dims, array, row.attributes())
    coordinates = {name: statistics.coords[name] for name in ("layer", "y", "x")}
    return xr.Dataset(variables, coordinates, {"region": statistics.attrs.get("region", "")})
