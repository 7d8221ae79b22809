"""Moments written out plainly, cell by cell and member by member, to judge the engine by."""

from __future__ import annotations

import numpy as np

from diagnosis_cases import MemoryEnsemble, box, random_ensemble
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.ensemble.grid import Geometry, Grid

AXES = ("x_velocity", "y_velocity")


def uneven_grid(rows=5, columns=7, layers=2, seed=3) -> Grid:
    """Make a grid of unequal cells with some land."""
    random = np.random.default_rng(seed)
    plain = box(layers, rows, columns)
    geometry = Geometry(
        dx=random.uniform(10e3, 20e3, (rows, columns)),
        dy=random.uniform(10e3, 20e3, (rows, columns)),
        mask=random.random((layers, rows, columns)) < 0.8,
        periodic_x=True,
        periodic_y=False,
    )
    return Grid(**{**vars(plain), "geometry": geometry})


class WeightedEnsemble(MemoryEnsemble):
    """Members on layers of varying thickness."""

    weighted = True


class GappedEnsemble(MemoryEnsemble):
    """Members that are missing at places."""

    gaps = True


def with_thickness(grid, *, members=5, times=3, outcrops=True, seed=1) -> WeightedEnsemble:
    """Make members of varying thickness; where the layer is gone, fields mean nothing."""
    plain = random_ensemble(grid, members=members, times=times, tracers=3, seed=seed)
    random = np.random.default_rng(seed + 100)
    thickness = random.uniform(100.0, 900.0, plain.values["x_velocity"].shape)
    if outcrops:
        gone = random.random(thickness.shape) < 0.15
        thickness[gone] = 0.0
        for values in plain.values.values():
            values[gone] = np.nan
    values = {**plain.values, "thickness": thickness}
    return WeightedEnsemble(grid, values, plain.tracers, plain.withheld_tracers)


def block_sums(values, factor):
    """Sum blocks of the last two axes, the last of which may be smaller."""
    rows, columns = values.shape[-2:]
    result = np.zeros((*values.shape[:-2], -(-rows // factor), -(-columns // factor)))
    for row in range(rows):
        for column in range(columns):
            result[..., row // factor, column // factor] += values[..., row, column]
    return result


def sea_area(grid):
    """Area of sea cells, shape (layer, y, x)."""
    return np.where(grid.geometry.mask, grid.geometry.area, 0.0)


def over_blocks(numerators, denominators, grid, factor):
    """Ratio of sums over times and blocks of fine fields, zero where nothing counts."""
    area = sea_area(grid)
    top = block_sums(np.where(area > 0.0, area * np.sum(numerators, axis=0), 0.0), factor)
    bottom = block_sums(np.where(area > 0.0, area * np.sum(denominators, axis=0), 0.0), factor)
    return np.where(bottom > 0.0, top / np.where(bottom > 0.0, bottom, 1.0), 0.0)


def weights_of(ensemble, members):
    """Weight of each time and member: thickness, or one where there is a value."""
    if getattr(ensemble, "weighted", False):
        return ensemble.values["thickness"][:, members]
    finite = np.ones(ensemble.values["x_velocity"][:, members].shape, bool)
    for values in ensemble.values.values():
        finite &= np.isfinite(values[:, members])
    return finite.astype(float)


def weighted_covariance(weight, first, second):
    """Weighted covariance over the first axis with n/(n - 1), its weight, and the mean of both.

    ``c_hat = <hc>/<h>``, ``J = <h u''c''>/<h>``: Young 2012, J. Phys. Oceanogr. 42, 692-707;
    de Szoeke and Bennett 1993, J. Phys. Oceanogr. 23.
    """
    first, second = np.where(weight > 0.0, first, 0.0), np.where(weight > 0.0, second, 0.0)
    total = weight.mean(axis=0)
    safe = np.where(total > 0.0, total, 1.0)
    one, two = (weight * first).mean(axis=0) / safe, (weight * second).mean(axis=0) / safe
    moment = (weight * (first - one) * (second - two)).mean(axis=0)
    count = (weight > 0.0).sum(axis=0)
    unbiased = np.where(count > 1, moment * count / np.maximum(count - 1, 1), 0.0)
    return unbiased, np.where(count > 1, total, 0.0), total, two


def plain_flux(ensemble, factor, members, axis, name):
    """Eddy flux about the ensemble mean of the same time."""
    parts = [
        weighted_covariance(weight, first, second)
        for weight, first, second in zip(
            weights_of(ensemble, members),
            ensemble.values[axis][:, members],
            ensemble.values[name][:, members],
            strict=True,
        )
    ]
    return over_blocks([p[0] for p in parts], [p[1] for p in parts], ensemble.grid, factor)


def plain_mean(ensemble, factor, members, name):
    """Mean over members, times and blocks."""
    weight = weights_of(ensemble, members)
    values = np.where(weight > 0.0, ensemble.values[name][:, members], 0.0)
    top, bottom = (weight * values).mean(axis=1), weight.mean(axis=1)
    return over_blocks(top, bottom, ensemble.grid, factor)


def plain_time_flux(ensemble, factor, members, axis, name):
    """Eddy flux about the time mean of each member, averaged over members."""
    weight = weights_of(ensemble, members)
    parts = [
        weighted_covariance(
            weight[:, place], ensemble.values[axis][:, member], ensemble.values[name][:, member]
        )
        for place, member in enumerate(members)
    ]
    return over_blocks([p[0] for p in parts], [p[1] for p in parts], ensemble.grid, factor)


def plain_subgrid_flux(ensemble, factor, members, axis, name):
    """Total flux on the coarse grid minus the unbiased flux of coarse ensemble means.

    The product of means of N members exceeds that of true means by covariance/N.
    """
    grid = ensemble.grid
    coarsening = Coarsening(grid, factor)
    every = []
    for time in range(len(ensemble.times)):
        u, c = (ensemble.values[key][time, members] for key in (axis, name))
        total = coarsening.mean((u * c).mean(axis=0))
        one, two = coarsening.mean(u), coarsening.mean(c)
        covariance = ((one - one.mean(axis=0)) * (two - two.mean(axis=0))).sum(axis=0)
        covariance /= len(members) - 1
        product = one.mean(axis=0) * two.mean(axis=0) - covariance / len(members)
        every.append(total - product)
    return np.mean(every, axis=0)
