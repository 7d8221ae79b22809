"""Statistics of small made-up regions whose transport tensor is known in full."""

from __future__ import annotations

import numpy as np
import xarray as xr

from learnclosure.ensemble.grid import Geometry, gradient

LAYERS, ROWS, COLUMNS = 2, 12, 16
WIDTH = 30e3
FIELD = ("layer", "y", "x")
SURFACE = ("y", "x")


def smooth(random, shape=(LAYERS, ROWS, COLUMNS), waves=4):
    """Long waves of order one."""
    y, x = np.meshgrid(
        np.arange(shape[-2]) / shape[-2], np.arange(shape[-1]) / shape[-1], indexing="ij"
    )
    field = np.zeros(shape)
    for layer in range(shape[0]):
        for _ in range(waves):
            number = random.integers(-2, 3, 2)
            phase = random.uniform(0, 2 * np.pi)
            field[layer] += random.normal() * np.cos(
                2 * np.pi * (number[0] * x + number[1] * y) + phase
            )
    return field / np.sqrt(waves)


def mean_state(random, jet):
    """Variables of a mean state: a jet along x with meanders, on a beta plane."""
    y = (np.arange(ROWS) - ROWS / 2 + 0.5) * WIDTH
    profile = np.exp(-((y / 90e3) ** 2))[:, None] * np.ones(COLUMNS)
    ones = np.ones((ROWS, COLUMNS))
    wet = np.ones((LAYERS, ROWS, COLUMNS))
    strength = np.array([1.0, 0.3])[:, None, None]
    fields = {
        "x_velocity": strength * (jet * profile + 0.05 * smooth(random)),
        "y_velocity": strength * 0.05 * smooth(random),
        "layer_thickness": np.array([1000.0, 3000.0])[:, None, None] * wet,
        "wet_share": wet,
        "eddy_kinetic_energy": strength**2 * 0.04 * np.exp(0.5 * smooth(random)),
    }
    surface = {
        "coriolis_parameter": 1e-4 + 2e-11 * y[:, None] * ones,
        "planetary_beta_x": 0.0 * ones,
        "planetary_beta_y": 2e-11 * ones,
        "sea_floor_depth": 4000.0 + 200.0 * smooth(random, (1, ROWS, COLUMNS))[0],
        "cell_width_x": WIDTH * ones,
        "cell_width_y": WIDTH * ones,
    }
    variables = {name: (FIELD, values) for name, values in fields.items()}
    variables |= {name: (SURFACE, values) for name, values in surface.items()}
    variables["reduced_gravity"] = (("interface", "y", "x"), 0.02 * ones[None])
    return variables


def statistics(
    name, seed, *, split="train", jet=0.4, tensor=None, noise=0.0, halves=True, withheld=True
):
    """Statistics of one region.

    ``tensor`` maps the dataset of the mean state to K, shape (4, layer, y, x); eddy fluxes
    are exactly those it makes, and each half adds its own noise as a share of their size.
    """
    random = np.random.default_rng(seed)
    variables = mean_state(random, jet)
    coordinates = {
        "x": (np.arange(COLUMNS) + 0.5) * WIDTH,
        "y": (np.arange(ROWS) + 0.5) * WIDTH,
    }
    scored = "dye" if withheld else ""
    attributes = {
        "region": name,
        "split": split,
        "periodic": "x y",
        "members": 8,
        "snapshots": 10,
        "tracers": "salt heat" if withheld else "salt dye",
        "withheld_tracers": scored,
        "vertical": "layers",
    }
    data = xr.Dataset(variables, coordinates, attributes)
    full = tensor(data) if tensor is not None else constant_tensor()
    for number, pair in enumerate(("xx", "xy", "yx", "yy")):
        data[f"transport_tensor_{pair}"] = (FIELD, full[number])
        data[f"transport_tensor_{pair}_standard_error"] = (FIELD, np.full_like(full[0], 10.0))
        data[f"reliability_transport_tensor_{pair}"] = (("layer",), np.full(LAYERS, 0.9))
        if halves:
            data[f"transport_tensor_{pair}_halves"] = (
                ("half", *FIELD),
                np.stack([full[number] * (1.0 + noise * random.normal()) for _ in range(2)]),
            )
    data["valid"] = (FIELD, np.ones((LAYERS, ROWS, COLUMNS)))
    geometry = Geometry(
        data["cell_width_x"].values,
        data["cell_width_y"].values,
        np.ones((LAYERS, ROWS, COLUMNS), bool),
        True,
        True,
    )
    for tracer in ("dye", "salt", "heat"):
        slope = gradient(smooth(random), geometry)
        flux = (
            -(full[0] * slope[0] + full[1] * slope[1]),
            -(full[2] * slope[0] + full[3] * slope[1]),
        )
        for axis, along, carried in zip("xy", slope, flux, strict=True):
            data[f"{tracer}_gradient_{axis}"] = (FIELD, along)
            data[f"{tracer}_eddy_flux_{axis}"] = (FIELD, carried)
            if halves:
                spread = noise * carried.std() * random.normal(size=(2, *carried.shape))
                data[f"{tracer}_eddy_flux_{axis}_halves"] = (("half", *FIELD), carried + spread)
    return data


def constant_tensor():
    """One anisotropic tensor everywhere, shape (4, layer, y, x)."""
    values = np.array([2000.0, -300.0, 500.0, 900.0])
    return np.broadcast_to(values[:, None, None, None], (4, LAYERS, ROWS, COLUMNS)).copy()
