"""Small ensembles on disk, right ones and wrong ones, in the layout the simulator writes."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from learnclosure.cli import main

QUICK = """
[closure]
regressors = ["ridge", "extra-trees"]
targets = ["linear"]
[export]
reference_points = 32
"""

GRADIENTS = {
    "dye_a": (1e-6, 0.0),
    "dye_b": (0.0, 1e-6),
    "dye_c": (1e-6, 1e-6),
    "dye_d": (-1e-6, 1e-6),
}


def member_dataset(
    number: int, *, rows: int = 12, columns: int = 16, times: int = 3, seed: int = 0
) -> xr.Dataset:
    """One member: a sheared mean flow, random eddies and tracers with linear means."""
    random = np.random.default_rng([seed, number])
    shape = (times, 2, rows, columns)
    dims = ("time", "layer", "y", "x")
    x, y = 15e3 * np.arange(columns), 15e3 * np.arange(rows)
    speed = np.array([0.2, 0.02])[:, None, None]
    jet = speed * np.exp(-(((y - y.mean()) / 50e3) ** 2))[None, :, None]
    velocity = {
        "x_velocity": jet + 0.1 * random.normal(size=shape),
        "y_velocity": 0.1 * random.normal(size=shape),
    }
    data = {}
    for name, values in velocity.items():
        attributes = {"standard_name": f"sea_water_{name}", "units": "m s-1"}
        data[name] = (dims, values.astype(np.float32), attributes)
    for name, (along_x, along_y) in GRADIENTS.items():
        mean = along_x * x[None, :] + along_y * y[:, None]
        eddy = -1e4 * (along_x * velocity["x_velocity"] + along_y * velocity["y_velocity"])
        values = mean + eddy + 0.01 * random.normal(size=shape)
        role = "withheld" if name == "dye_d" else "inversion"
        attributes = {"units": "1", "long_name": name, "tracer_role": role}
        data[name] = (dims, values.astype(np.float32), attributes)
    data["layer_thickness"] = (
        "layer",
        [1000.0, 3000.0],
        {"units": "m", "standard_name": "cell_thickness"},
    )
    data["reduced_gravity"] = ("interface", [0.016], {"units": "m s-2"})
    data["sea_floor_depth"] = (
        ("y", "x"),
        np.full((rows, columns), 4000.0),
        {"units": "m", "standard_name": "sea_floor_depth_below_geoid"},
    )
    data["coriolis_parameter"] = (
        ("y", "x"),
        np.full((rows, columns), 1e-4),
        {"units": "s-1", "standard_name": "coriolis_parameter"},
    )
    coordinates = {
        "x": ("x", x, {"units": "m", "axis": "X"}),
        "y": ("y", y, {"units": "m", "axis": "Y"}),
        "time": (
            "time",
            5.0 * np.arange(times),
            {"units": "days since 2000-01-01", "axis": "T", "standard_name": "time"},
        ),
        "layer": ("layer", [1, 2], {"standard_name": "model_level_number", "positive": "down"}),
        "realization": ((), number, {"standard_name": "realization", "units": "1"}),
    }
    attributes = {
        "Conventions": "CF-1.11",
        "periodic": "",
        "vertical": "layers",
        "planetary_beta": 2e-11,
    }
    return xr.Dataset(data, coordinates, attributes)


def write_members(
    folder: Path,
    *,
    members: int = 4,
    change: Callable[[int, xr.Dataset], xr.Dataset] | None = None,
    **shape: int,
) -> Path:
    """Write members, each passed through ``change`` first; return the folder."""
    folder.mkdir(parents=True, exist_ok=True)
    for number in range(members):
        dataset = member_dataset(number, **shape)
        if change is not None:
            dataset = change(number, dataset)
        dataset.to_netcdf(folder / f"member_{number:02d}.nc", engine="h5netcdf")
    return folder


def write_study(folder: Path, *regions: str, extra: str = "", **splits: str) -> Path:
    """Write a study over regions that lie in folders of their own names."""
    tables = [
        f'[[ensemble]]\nname = "{name}"\nsplit = "{splits.get(name, "train")}"\n'
        f'files = "{name}/*.nc"\n'
        for name in regions
    ]
    path = folder / "study.toml"
    path.write_text('output = "results"\n' + "\n".join(tables) + extra)
    return path


def run_command(*words: object) -> object:
    """Run the command line in this process and return its exit code."""
    with pytest.raises(SystemExit) as caught:
        main([str(word) for word in words])
    return caught.value.code
