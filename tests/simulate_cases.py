"""Small channels and readers shared by the tests of the simulated ensembles."""

from __future__ import annotations

from pathlib import Path

import h5netcdf
import numpy as np

from learnclosure.simulate.dynamics import Channel
from learnclosure.simulate.regimes import ChannelRegime


def small_regime(**changes) -> ChannelRegime:
    """Describe a channel of 24 x 16 cells of 20 km with everything switched on."""
    values = {
        "name": "sedge", "deformation_radius": 35.0e3, "jet_speed": 0.4, "jet_width": 80.0e3,
        "beta": 2.0e-11, "ridge_height": 300.0, "ridge_position": 0.3, "ridge_tilt": 0.2,
        "drag_days": 50.0, "time_step": 3600.0, "columns": 24, "rows": 16, "spacing": 20.0e3,
    }  # fmt: skip
    return ChannelRegime(**{**values, **changes})


def started(regime: ChannelRegime, members: int = 2, days: int = 0) -> Channel:
    """Start members of a channel and run them for some days."""
    channel = Channel(regime, [np.random.default_rng([7, member]) for member in range(members)])
    channel.advance(days * regime.steps_per_day)
    return channel


def read_members(folder: Path) -> dict[str, np.ndarray]:
    """Read all variables of all members, stacked along a leading member axis."""
    stacked: dict[str, list[np.ndarray]] = {}
    for path in sorted(folder.glob("member_*.nc")):
        with h5netcdf.File(path, "r") as file:
            for name, variable in file.variables.items():
                stacked.setdefault(name, []).append(variable[...])
    return {name: np.array(values) for name, values in stacked.items()}
