"""Tensors of a foreign model's files against plain NumPy, on levels and on an isothermal layer.

The reference reads the files with h5py, knows from their makers where velocities sit and
what marks land, and does everything else cell by cell: no part of it is shared with the
package.
"""

from __future__ import annotations

from pathlib import Path

import h5py
import numpy as np
import pytest

from layers_cases import weighted_moments
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.tensor import least_squares_tensor, normal_equations
from learnclosure.ensemble.averaging import averaged
from learnclosure.ensemble.grid import gradient
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.study import DiagnosisSettings, read_study

HERE = Path(__file__).parent
STUDY = HERE.parent / "experiments" / "foreign_fixture" / "study.toml"
FILES = sorted((HERE / "data" / "foreign").glob("channel_m*.snapshot.nc"))
LAND = -1e18
CELL = 20e3
TRACERS = ("salt", "trc_a", "trc_b")
WARM, COLD = 12.0, 6.0
"""Bounds of the isothermal layer, degrees Celsius."""
LARGEST_CONDITION = 50.0


def read(name, time):
    """All members of one variable, the top level first, NaN on land."""
    members = []
    for path in FILES:
        with h5py.File(path) as file:
            members.append(file[name][time][::-1])
    values = np.stack(members)
    return np.where(values == LAND, np.nan, values)


def centred(time):
    """Velocities at cell centres: means of two faces, none through land or walls."""
    east, north = np.nan_to_num(read("u", time)), np.nan_to_num(read("v", time))
    south = np.concatenate([np.zeros_like(north[..., :1, :]), north[..., :-1, :]], axis=-2)
    return 0.5 * (east + np.roll(east, 1, axis=-1)), 0.5 * (north + south)


def slope(mean, sea):
    """Gradient of one level, cell by cell: one-sided at coasts, periodic along x."""
    rows, columns = mean.shape
    found = np.zeros((2, rows, columns))
    for j in range(rows):
        for i in range(columns):
            if not sea[j, i]:
                continue
            neighbours = (
                ((j, (i + 1) % columns), (j, (i - 1) % columns)),
                ((j + 1, i) if j + 1 < rows else None, (j - 1, i) if j > 0 else None),
            )
            for axis, (ahead, behind) in enumerate(neighbours):
                high = ahead if ahead is not None and sea[ahead] else (j, i)
                low = behind if behind is not None and sea[behind] else (j, i)
                steps = (high != (j, i)) + (low != (j, i))
                if steps:
                    found[axis, j, i] = (mean[high] - mean[low]) / (steps * CELL)
    return found


def plain_tensor(means, fluxes, sea):
    """Least squares in each cell with tracers weighted by their mean square gradient."""
    gradients = [slope(mean, sea) for mean in means]
    weights = [1.0 / np.sqrt((g[:, sea] ** 2).sum(axis=0).mean()) for g in gradients]
    tensor = np.full((*sea.shape, 2, 2), np.nan)
    for j, i in zip(*np.nonzero(sea), strict=True):
        left = np.array([w * g[:, j, i] for w, g in zip(weights, gradients, strict=True)])
        right = np.array([-w * f[:, j, i] for w, f in zip(weights, fluxes, strict=True)])
        if np.linalg.cond(left) <= LARGEST_CONDITION:
            tensor[j, i] = np.linalg.lstsq(left, right, rcond=None)[0].T
    return tensor


def alike(found, expected):
    """Compare which cells are determined, and their values."""
    np.testing.assert_array_equal(np.isnan(found), np.isnan(expected))
    known = np.isfinite(expected)
    assert known.sum() > 200
    np.testing.assert_allclose(found[known], expected[known], rtol=1e-6, atol=1e-6)


@pytest.fixture(scope="module")
def study():
    return read_study(STUDY)


def test_tensors_on_levels_are_those_of_plain_numpy(study):
    with open_ensemble(study.ensembles[0], study.folder) as ensemble:
        statistics = diagnose(ensemble, DiagnosisSettings(coarsen=1))
    found = np.stack(
        [
            np.stack(
                [statistics[f"least_squares_tensor_{row}{column}"].values for column in "xy"], -1
            )
            for row in "xy"
        ],
        axis=-2,
    )
    times = range(2)
    velocities = [centred(time) for time in times]
    for level in range(3):
        sea = np.isfinite(read("salt", 0)[0, level])
        means, fluxes = [], []
        for name in TRACERS:
            values = [np.nan_to_num(read(name, time)[:, level]) for time in times]
            means.append(np.mean(values, axis=(0, 1)))
            covariance = [
                sum((u - u.mean(axis=0)) * (c - c.mean(axis=0))) / (len(FILES) - 1)
                for c, pair in zip(values, velocities, strict=True)
                for u in (part[:, level] for part in pair)
            ]
            fluxes.append(np.stack([np.mean(covariance[axis::2], axis=0) for axis in range(2)]))
        alike(found[level], plain_tensor(means, fluxes, sea))


def isothermal_layer(time, names):
    """Thickness of the layer and its averages of each field, member by member."""
    with h5py.File(FILES[0]) as file:
        cell = file["dzt"][:][::-1]
    warmth = read("temp", time)
    u, v = centred(time)
    values = {"u": u, "v": v, **{name: read(name, time) for name in names}}
    members, _, rows, columns = warmth.shape
    thickness = np.zeros((members, rows, columns))
    content = {name: np.zeros((members, rows, columns)) for name in values}
    for place in np.ndindex(members, rows, columns):
        member, j, i = place
        for level in range(len(cell)):
            if COLD < warmth[member, level, j, i] <= WARM:
                thickness[place] += cell[level]
                for name, field in values.items():
                    content[name][place] += cell[level] * field[member, level, j, i]
    there = np.where(thickness > 0.0, thickness, 1.0)
    return thickness, {name: total / there for name, total in content.items()}


def layered(study, ensemble):
    settings = DiagnosisSettings(
        coarsen=1,
        layers={
            "quantity": "temperature",
            "edges": (WARM, COLD),
            "units": "degC",
            "reconstruction": "constant",
            "least_share": 1.0,
        },
    )
    return averaged(ensemble, settings)


def test_an_isothermal_layer_is_that_of_plain_numpy(study):
    with open_ensemble(study.ensembles[0], study.folder) as ensemble:
        layers = layered(study, ensemble)
        wet = layers.grid.geometry.mask[1]
        assert 50 < wet.sum() < wet.size
        for time in range(2):
            fields = layers.fields(time)
            thickness, means = isothermal_layer(time, TRACERS)
            np.testing.assert_allclose(
                fields["thickness"][:, 1], np.where(wet, thickness, 0.0), rtol=1e-12
            )
            for theirs, ours in (
                ("u", "x_velocity"),
                ("v", "y_velocity"),
                *zip(TRACERS, TRACERS, strict=True),
            ):
                np.testing.assert_allclose(
                    fields[ours][:, 1], np.where(wet, means[theirs], 0.0), rtol=1e-9, atol=1e-12
                )


def test_thickness_weighted_tensors_of_the_isothermal_layer(study):
    plain = [isothermal_layer(time, TRACERS) for time in range(2)]
    with open_ensemble(study.ensembles[0], study.folder) as ensemble:
        layers = layered(study, ensemble)
        geometry = Coarsening(layers.grid, 1).geometry
        remapped = [layers.fields(time) for time in range(2)]
    sea = geometry.mask[1]
    means, fluxes, found_means, found_fluxes = [], [], [], []
    for name in TRACERS:
        mean, flux = together([(h, values["u"], values["v"], values[name]) for h, values in plain])
        means.append(mean)
        fluxes.append(flux)
        names = ("thickness", "x_velocity", "y_velocity", name)
        mean, flux = together([tuple(fields[part] for part in names) for fields in remapped])
        found_means.append(mean)
        found_fluxes.append(flux)
    gradients = np.stack([np.stack(gradient(mean, geometry)) for mean in found_means])
    area = geometry.area * geometry.mask
    found = least_squares_tensor(normal_equations(np.stack(found_fluxes), gradients, area))[1]
    expected = plain_tensor(means, fluxes, sea)
    np.testing.assert_array_equal(np.isnan(found), np.isnan(expected))
    known = np.isfinite(expected)
    assert known.sum() > 100
    np.testing.assert_allclose(found[known], expected[known], rtol=1e-5, atol=1e-5)


def together(times):
    """Weighted mean and unbiased flux per unit of thickness over members, then times."""
    thickness, content, flux = 0.0, 0.0, 0.0
    for h, u, v, c in times:
        with np.errstate(invalid="ignore"):
            pairs = [weighted_moments(h, velocity, c) for velocity in (u, v)]
        members = len(h)
        thickness = thickness + pairs[0][0]
        content = content + pairs[0][0] * pairs[0][2]
        flux = flux + np.stack([pair[3] for pair in pairs]) * members / (members - 1)
    with np.errstate(invalid="ignore"):
        return np.nan_to_num(content / thickness), np.nan_to_num(flux / thickness)
