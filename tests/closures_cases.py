"""Invented statistics with a known closure law, for testing what learns from them."""

from __future__ import annotations

import numpy as np
import xarray as xr

from learnclosure.features.frames import frame_axes, tensor_to_model
from learnclosure.features.inputs import compute_inputs
from learnclosure.features.mean_state import MeanState
from learnclosure.features.scales import tensor_scale

ROWS, COLUMNS, LAYERS = 24, 40, 2
CELL = 30.0e3
FIELD, SURFACE = ("layer", "y", "x"), ("y", "x")


def mean_state(region: str, jet_speed: float, meander: float, ridge: float) -> xr.Dataset:
    """Make the mean state of an invented channel with a meandering two-layer jet."""
    x = (np.arange(COLUMNS) + 0.5) * CELL
    y = (np.arange(ROWS) + 0.5) * CELL
    xx, yy = np.meshgrid(x / x[-1], y - 0.5 * ROWS * CELL)
    axis = meander * np.sin(2.0 * np.pi * xx)
    profile = np.exp(-(((yy - axis) / 90e3) ** 2))
    slope = 2.0 * np.pi * meander / x[-1] * np.cos(2.0 * np.pi * xx)
    u = np.stack([jet_speed * profile + 0.02, 0.25 * jet_speed * profile])
    v = u * slope * np.array([1.0, 0.6])[:, None, None]
    thickness = np.stack([np.full((ROWS, COLUMNS), 1000.0), np.full((ROWS, COLUMNS), 3000.0)])
    depth = 4000.0 - ridge * np.exp(-(((xx - 0.4) / 0.08) ** 2))
    thickness[1] = depth - 1000.0
    energy = (0.3 * jet_speed) ** 2 * (0.3 + profile) * np.array([1.0, 0.4])[:, None, None]
    variables = {
        "x_velocity": (FIELD, u),
        "y_velocity": (FIELD, v),
        "layer_thickness": (FIELD, thickness),
        "reduced_gravity": (("interface", "y", "x"), np.full((1, ROWS, COLUMNS), 0.02)),
        "coriolis_parameter": (SURFACE, 1e-4 + 2e-11 * yy),
        "planetary_beta_x": (SURFACE, np.zeros_like(yy)),
        "planetary_beta_y": (SURFACE, np.full_like(yy, 2e-11)),
        "sea_floor_depth": (SURFACE, depth),
        "cell_width_x": (SURFACE, np.full_like(yy, CELL)),
        "cell_width_y": (SURFACE, np.full_like(yy, CELL)),
        "wet_share": (FIELD, np.ones_like(u)),
        "eddy_kinetic_energy": (FIELD, energy),
    }
    attributes = {
        "region": region,
        "split": "train",
        "vertical": "layers",
        "periodic": "x",
        "members": 8,
        "snapshots": 10,
    }
    return xr.Dataset(variables, {"x": x, "y": y}, attributes)


def with_known_law(state: xr.Dataset, family: str, noise: float = 0.0, seed: int = 0) -> xr.Dataset:
    """Add transport tensors that follow an invented law of the inputs."""
    arrays = {str(name): np.asarray(state[name].values) for name in state.variables}
    inputs = compute_inputs(MeanState.from_mapping(arrays, dict(state.attrs)))
    inputs = {name: np.broadcast_to(v, (LAYERS, ROWS, COLUMNS)) for name, v in inputs.items()}
    speed = np.hypot(inputs["x_velocity"], inputs["y_velocity"])
    distance = inputs["jet_distance"]
    size = (
        np.full_like(speed, 1500.0)
        if family == "mean-field"
        else 0.3 * tensor_scale(np, inputs, "local-energy")
    )
    near = np.exp(-distance * distance)
    upper = np.where(inputs["layer_index"] < 0.5, 1.0, 0.6)
    nn = size * upper * (1.0 - 0.6 * near)
    tt = size * upper * (1.0 + 1.5 * near + speed)
    nt = 0.2 * size * np.tanh(distance)
    alpha = 0.4 * size * near
    components = tensor_to_model(np, frame_axes(np, inputs), nn, nt - alpha, nt + alpha, tt)
    random = np.random.default_rng(seed)
    result = state.copy()
    for pair, values in zip(("xx", "xy", "yx", "yy"), components, strict=True):
        noisy = values + noise * size * random.normal(size=values.shape)
        result[f"transport_tensor_{pair}"] = (FIELD, noisy)
        result[f"transport_tensor_{pair}_standard_error"] = (FIELD, 0.1 * np.abs(values) + 1.0)
    result["valid"] = (FIELD, np.ones((LAYERS, ROWS, COLUMNS), dtype=np.int8))
    return result


def invented_regions(family: str, noise: float = 0.05) -> list[xr.Dataset]:
    """Make three regions that share one law and differ in regime."""
    regimes = {
        "amber": (0.40, 60e3, 300.0),
        "birch": (0.32, 90e3, 500.0),
        "cedar": (0.36, 75e3, 400.0),
    }
    return [
        with_known_law(mean_state(name, *regime), family, noise, seed)
        for seed, (name, regime) in enumerate(regimes.items())
    ]
