"""Ensembles whose fields act on the flow, some with coefficients known exactly."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from diagnosis_cases import GRADIENTS, MemoryEnsemble, box, random_ensemble, uniform_eddies
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.estimate import Estimator
from learnclosure.diagnosis.moments import accumulate_moments
from learnclosure.ensemble.active import interface_height
from learnclosure.study import DiagnosisSettings

PLAIN = DiagnosisSettings(coarsen=1)


def displaced(members: int = 6, times: int = 3, seed: int = 4) -> tuple[np.ndarray, np.ndarray]:
    """Velocities and displacements, (time, member), x + i y, that correlate."""
    random = np.random.default_rng(seed)
    velocity = 0.1 * (
        random.normal(size=(times, members)) + 1j * random.normal(size=(times, members))
    )
    noise = random.normal(size=(times, members)) + 1j * random.normal(size=(times, members))
    return velocity, 2e4 * (velocity / 0.1 + 0.4 * noise)


def meridional_diffusivity(velocity: np.ndarray, displacement: np.ndarray) -> float:
    """Mean over times of the unbiased covariance of v and the displacement along y."""
    v, eta = velocity.imag, displacement.imag
    anomaly = (v - v.mean(axis=1, keepdims=True)) * (eta - eta.mean(axis=1, keepdims=True))
    return float((anomaly.sum(axis=1) / (v.shape[1] - 1)).mean())


def sloping_layers(
    slopes: np.ndarray, thicknesses: np.ndarray, *, beta: float = 0.0, coriolis: float = 1e-4
) -> tuple[MemoryEnsemble, float]:
    """Layers between surfaces of given slope along y, all displaced alike.

    ``slopes`` are those of the surfaces above and below every layer, from the top down.
    Potential vorticity is ``beta y - (f/H) h``. Returns the diffusivity of the
    displacement as well, which is that of every surface.
    """
    layers = len(thicknesses)
    grid = box(layers, 6, 8, dx=20e3, dy=20e3)
    velocity, displacement = displaced()
    ensemble = uniform_eddies(grid, velocity, displacement, GRADIENTS)
    place = grid.y[:, None] - displacement.imag[:, :, None, None, None]
    rise = (slopes[:-1] - slopes[1:])[:, None, None]
    thickness = thicknesses[:, None, None] + rise * (place - grid.y.mean()) * np.ones(grid.shape)
    stretched = thickness / thicknesses[:, None, None]
    ensemble.values["thickness"] = thickness
    ensemble.values["potential_vorticity"] = beta * grid.y[:, None] - coriolis * stretched
    ensemble.values["interface_height"] = interface_height(thickness, grid.sea_floor_depth)
    ensemble.active = ("potential_vorticity", "thickness", "interface_height")
    return ensemble, meridional_diffusivity(velocity, displacement)


def sloping_levels(stratification: float, slope: float) -> tuple[MemoryEnsemble, float]:
    """Levels with buoyancy ``N2 z + M2 y`` displaced along y; diffusivity of that as well."""
    grid = replace(box(5, 6, 8), vertical="levels", reduced_gravity=None)
    velocity, displacement = displaced()
    ensemble = uniform_eddies(grid, velocity, displacement, GRADIENTS)
    height = -1000.0 * (np.arange(5) + 0.5)[:, None, None]
    place = grid.y[:, None] - displacement.imag[:, :, None, None, None]
    ensemble.values["buoyancy"] = stratification * height + slope * place * np.ones(grid.shape)
    ensemble.active = ("buoyancy",)
    return ensemble, meridional_diffusivity(velocity, displacement)


def noisy_active(**shape: int) -> MemoryEnsemble:
    """Random members with every active field of layers, correlated with velocity."""
    grid = box(2, 8, 10, periodic=(True, False))
    ensemble = random_ensemble(grid, **shape)
    random = np.random.default_rng(shape.get("seed", 0) + 99)
    u, v = ensemble.values["x_velocity"], ensemble.values["y_velocity"]
    bend = np.sin(grid.y / 3e4)[:, None] + np.cos(grid.x / 4e4)
    thickness = 1000.0 + 40.0 * bend - 150.0 * v + 5.0 * random.normal(size=u.shape)
    ensemble.values["thickness"] = thickness
    ensemble.values["interface_height"] = interface_height(thickness, grid.sea_floor_depth)
    ensemble.values["potential_vorticity"] = 1e-6 * (bend + u + random.normal(size=u.shape))
    ensemble.active = ("potential_vorticity", "thickness", "interface_height")
    return ensemble


def accumulated(ensemble: MemoryEnsemble, factor: int = 1):
    """Moments and estimator of an ensemble."""
    coarsening = Coarsening(ensemble.grid, factor)
    geometry = coarsening.geometry
    area = geometry.area * coarsening.wet_share
    moments = accumulate_moments(ensemble, coarsening)
    mean = moments.whole.mean
    return moments, Estimator.from_settings(geometry, area, PLAIN, ensemble.tracers, mean)
