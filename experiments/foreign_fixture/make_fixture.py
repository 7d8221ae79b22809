"""Run the public ocean model veros on a small invented channel and keep what it writes.

The model is not a dependency of learnclosure; see README.md beside this file.
"""

from __future__ import annotations

import argparse
import os
import shutil
from pathlib import Path
from tempfile import TemporaryDirectory
from typing import Any

import numpy as np
from veros import VerosSetup, veros_routine
from veros.core import thermodynamics, utilities
from veros.core.operators import at, update
from veros.variables import Variable

MEMBERS = 3
DAY = 86400.0
CELL = 20e3
COLUMNS, ROWS = 18, 14
THICKNESS = (1000.0, 600.0, 400.0)
TRACERS = ("trc_a", "trc_b", "trc_c")
WRITTEN = [
    "xt",
    "yt",
    "zt",
    "zw",
    "dxt",
    "dyt",
    "dzt",
    "ht",
    "area_t",
    "kbot",
    "temp",
    "salt",
    "u",
    "v",
]


class Channel(VerosSetup):  # type: ignore[misc]
    """A re-entrant channel with a headland, a ridge, a front and three passive tracers.

    Parameters
    ----------
    member : int
        Number of the member; it seeds the noise of the initial temperature.
    """

    def __init__(self, member: int) -> None:
        self.member = member
        super().__init__()

    @veros_routine
    def set_parameter(self, state: Any) -> None:
        """Set sizes, time step and frictions; declare the passive tracers."""
        settings = state.settings
        settings.identifier = f"channel_m{self.member:02d}"
        settings.description = "Small re-entrant channel with a headland"
        settings.nx, settings.ny, settings.nz = COLUMNS, ROWS, len(THICKNESS)
        settings.dt_mom = settings.dt_tracer = 1800.0
        settings.runlen = 12 * DAY
        settings.coord_degree = False
        settings.enable_cyclic_x = True
        settings.enable_streamfunction = False
        settings.eq_of_state_type = 1
        settings.enable_conserve_energy = False
        settings.enable_implicit_vert_friction = True
        settings.kappaM_0, settings.kappaH_0 = 1e-3, 1e-5
        settings.enable_biharmonic_friction = True
        settings.A_hbi = 6e10
        settings.enable_superbee_advection = True
        settings.enable_bottom_friction = True
        settings.r_bot = 4e-6
        for name in TRACERS:
            words = f"Passive tracer {name[-1]}"
            state.var_meta[name] = Variable(name, ("xt", "yt", "zt"), "", words)

    @veros_routine
    def set_grid(self, state: Any) -> None:
        """Set the widths of the cells."""
        vs = state.variables
        vs.dxt = update(vs.dxt, at[...], CELL)
        vs.dyt = update(vs.dyt, at[...], CELL)
        vs.dzt = np.array(THICKNESS)

    @veros_routine
    def set_coriolis(self, state: Any) -> None:
        """Set a beta plane."""
        vs = state.variables
        vs.coriolis_t = update(vs.coriolis_t, at[...], 0.8e-4 + 2e-11 * vs.yt[None, :])

    @veros_routine
    def set_topography(self, state: Any) -> None:
        """Set a headland at the southern wall and a ridge across the channel."""
        vs = state.variables
        x, y = np.meshgrid(vs.xt / CELL, vs.yt / CELL, indexing="ij")
        deepest = np.where(np.abs(x - 12.0) < 2.5, 2, 1)
        headland = (np.abs(x - 5.0) < 1.8) & (y < 3.2)
        vs.kbot = update(vs.kbot, at[...], np.where(headland, 0, deepest))

    @veros_routine
    def set_initial_conditions(self, state: Any) -> None:
        """Set a front with noise of the member's own, and smooth passive tracers."""
        vs = state.variables
        random = np.random.default_rng(self.member)
        x, y = np.meshgrid(vs.xt / (COLUMNS * CELL), vs.yt / (ROWS * CELL), indexing="ij")
        noise = sum(
            random.normal() * np.cos(2 * np.pi * (k * x + random.random())) * np.sin(n * np.pi * y)
            for k in range(1, 5)
            for n in range(1, 4)
        )
        depth = vs.zt[None, None, :] / sum(THICKNESS)
        front = 4.0 * np.tanh((y - 0.5) / 0.15)
        temperature = 12.0 + 10.0 * depth + (front + noise)[:, :, None] * (1.0 + depth)
        salinity = 35.0 + 0.5 * np.cos(2 * np.pi * x)[:, :, None] + 0.2 * depth
        passive = (
            np.sin(2 * np.pi * x) + y,
            np.cos(np.pi * y) + 0.3 * np.sin(4 * np.pi * x),
            np.cos(2 * np.pi * (x - 0.2)) * np.sin(np.pi * y),
        )
        for name, values in (("temp", temperature), ("salt", salinity)):
            field = getattr(vs, name)
            setattr(vs, name, update(field, at[...], (values * vs.maskT)[..., None]))
        for name, values in zip(TRACERS, passive, strict=True):
            setattr(vs, name, values[:, :, None] * vs.maskT)

    @veros_routine
    def set_forcing(self, state: Any) -> None:
        """Carry the passive tracers one step on with the model's own advection."""
        vs = state.variables
        for name in TRACERS:
            tracer = getattr(vs, name)
            tracer = tracer + state.settings.dt_tracer * thermodynamics.advect_tracer(state, tracer)
            cyclic = state.settings.enable_cyclic_x
            setattr(vs, name, utilities.enforce_boundaries(tracer, cyclic))

    @veros_routine
    def set_diagnostics(self, state: Any) -> None:
        """Ask for snapshots only."""
        for diagnostic in state.diagnostics.values():
            diagnostic.output_frequency = diagnostic.sampling_frequency = 1e12
        snapshot = state.diagnostics["snapshot"]
        snapshot.output_frequency = 6 * DAY
        snapshot.output_variables = [*WRITTEN, *TRACERS]

    @veros_routine
    def after_timestep(self, state: Any) -> None:
        """Do nothing more."""


def main() -> None:
    """Run all members and write the fixture."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("target", type=Path, help="folder for the files")
    target: Path = parser.parse_args().target.resolve()
    target.mkdir(parents=True, exist_ok=True)
    with TemporaryDirectory() as folder:
        os.chdir(folder)
        for member in range(MEMBERS):
            model = Channel(member)
            model.setup()
            model.run(show_progress_bar=False)
            name = f"channel_m{member:02d}.snapshot.nc"
            shutil.copyfile(name, target / name)


if __name__ == "__main__":
    main()
