"""Mean states with known features."""

from __future__ import annotations

import numpy as np

from learnclosure.ensemble.grid import Geometry
from learnclosure.features.mean_state import MeanState
from learnclosure.quantities import INPUTS


def mean_state(
    *,
    rows=12,
    columns=14,
    width=10e3,
    thickness=(1000.0, 3000.0),
    gravity=(0.02,),
    coriolis=1e-4,
    beta=0.0,
    u=None,
    v=None,
    depth=None,
    mask=None,
    energy=None,
    periodic=(False, False),
):
    """Make a mean state on a square grid; what is not given is uniform or at rest."""
    layers = len(thickness)
    shape = (layers, rows, columns)
    if mask is None:
        mask = np.ones(shape, bool)
    widths = np.full((rows, columns), width)
    surface = np.ones((rows, columns))
    spread = np.ones((1, rows, columns))
    return MeanState(
        geometry=Geometry(widths, widths, mask, *periodic),
        x_velocity=np.zeros(shape) if u is None else np.broadcast_to(u, shape).copy(),
        y_velocity=np.zeros(shape) if v is None else np.broadcast_to(v, shape).copy(),
        layer_thickness=np.where(mask, np.reshape(thickness, (layers, 1, 1)) * spread, 0.0),
        reduced_gravity=np.reshape(gravity, (layers - 1, 1, 1)) * spread,
        coriolis_parameter=coriolis * surface,
        planetary_beta_x=np.zeros((rows, columns)),
        planetary_beta_y=beta * surface,
        sea_floor_depth=sum(thickness) * surface if depth is None else depth,
        eddy_kinetic_energy=energy,
    )


def level_state(levels, *, buoyancy_frequency, depth, shear, coriolis, beta=0.0):
    """Uniform stratification and shear on equal levels."""
    step = depth / levels
    middle = -step * (np.arange(levels) + 0.5)
    return mean_state(
        rows=6,
        columns=6,
        thickness=(step,) * levels,
        gravity=(buoyancy_frequency**2 * step,) * (levels - 1),
        coriolis=coriolis,
        beta=beta,
        u=shear * (middle + depth)[:, None, None],
    )


def coordinates(state):
    """Positions of the cell centres, m."""
    rows, columns = state.geometry.dx.shape
    y, x = np.mgrid[0:rows, 0:columns] * state.geometry.dx[0, 0]
    return x, y


def random_inputs(seed, count=40):
    """Make inputs of points at random, of the sizes they have in the ocean."""
    random = np.random.default_rng(seed)
    inputs = {name: random.normal(size=count) for name in INPUTS}
    for name in inputs:
        if name.startswith(("pv_gradient_x", "pv_gradient_y", "planetary_beta")):
            inputs[name] *= 2e-11
        if name.startswith(("topographic_beta", "vorticity_gradient")):
            inputs[name] *= 2e-11
        if name.startswith("velocity_gradient"):
            inputs[name] *= 1e-6
        if name.startswith("shear_rate"):
            inputs[name] *= 1e-5
    inputs["coriolis_parameter"] *= 1e-4
    for name, size in (
        ("deformation_radius", 3e4), ("jet_width", 8e4), ("eddy_kinetic_energy", 0.05),
        ("eddy_kinetic_energy_column", 0.02), ("eady_growth_rate", 1e-6), ("jet_speed", 0.4),
        ("axis_width", 8e4), ("axis_speed", 0.4), ("buoyancy_frequency_squared", 4e-6),
        ("land_distance", 1e5), ("cell_width", 3e4), ("second_deformation_radius", 1e4),
        ("wkb_deformation_radius", 3e4),
    ):  # fmt: skip
        inputs[name] = np.abs(inputs[name]) * size + 0.1 * size
    return inputs
