"""Ensembles in memory, some with a transport tensor known exactly."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from learnclosure.ensemble.grid import Geometry, Grid

GRADIENTS = np.array([[1.0, 0.0], [0.3, 0.9], [-0.6, 0.7], [0.2, -1.1], [0.8, 0.5]]) * 1e-6


def box(
    layers: int = 1,
    rows: int = 8,
    columns: int = 10,
    *,
    dx: float = 15e3,
    dy: float = 15e3,
    mask: np.ndarray | None = None,
    periodic: tuple[bool, bool] = (False, False),
) -> Grid:
    """Make a grid of equal cells, 1000 m to the layer."""
    wet = np.ones((layers, rows, columns), bool) if mask is None else mask
    one = np.ones((rows, columns))
    return Grid(
        x=(np.arange(columns) + 0.5) * dx,
        y=(np.arange(rows) + 0.5) * dy,
        geometry=Geometry(dx * one, dy * one, wet, *periodic),
        layer_thickness=np.where(wet, 1000.0, 0.0),
        reduced_gravity=np.full((layers - 1, rows, columns), 0.02),
        coriolis_parameter=1e-4 * one,
        planetary_beta_x=0.0 * one,
        planetary_beta_y=2e-11 * one,
        sea_floor_depth=1000.0 * layers * one,
        vertical="layers",
    )


@dataclass
class MemoryEnsemble:
    """Offers what the diagnosis asks of an ensemble, from arrays (time, member, layer, y, x)."""

    grid: Grid
    values: dict[str, np.ndarray]
    tracers: tuple[str, ...]
    withheld_tracers: tuple[str, ...] = ()
    name: str = "basin"
    split: str = "train"
    units: dict[str, str] = field(default_factory=dict)
    assumptions: tuple[str, ...] = ("resting thickness is the mean thickness",)
    asked: list[int] = field(default_factory=list)
    active: tuple[str, ...] = ()
    left_out_gradients: dict[str, np.ndarray] = field(default_factory=dict)

    @property
    def member_labels(self) -> tuple[int, ...]:
        """Number the members."""
        return tuple(range(self.values["x_velocity"].shape[1]))

    @property
    def times(self) -> np.ndarray:
        """Count days."""
        return np.arange(len(self.values["x_velocity"]), dtype=float)

    @property
    def has_buoyancy(self) -> bool:
        """Tell whether buoyancy is among the fields."""
        return "buoyancy" in self.values

    def fields(self, time: int) -> dict[str, np.ndarray]:
        """Return all fields of one time and remember that it was asked for."""
        self.asked.append(time)
        return {name: values[time] for name, values in self.values.items()}


def uniform_eddies(
    grid: Grid, velocity: np.ndarray, displacement: np.ndarray, gradients: np.ndarray = GRADIENTS
) -> MemoryEnsemble:
    """Tracers ``G . (position - displacement)`` carried by velocities uniform in space.

    ``velocity`` and ``displacement`` have shape (time, member) and hold x + i y. The last
    tracer is withheld.
    """
    everywhere = np.ones(grid.shape)
    spread = (slice(None), slice(None), None, None, None)
    values = {
        "x_velocity": velocity.real[spread] * everywhere,
        "y_velocity": velocity.imag[spread] * everywhere,
    }
    place = grid.x[None, :] + 1j * grid.y[:, None] - displacement[spread]
    names = tuple(f"dye_{letter}" for letter in "abcdefgh"[: len(gradients)])
    for name, (g_x, g_y) in zip(names, gradients, strict=True):
        values[name] = (g_x * place.real + g_y * place.imag) * everywhere
    return MemoryEnsemble(grid, values, names[:-1], names[-1:])


def random_ensemble(
    grid: Grid,
    *,
    members: int = 6,
    times: int = 2,
    tracers: int = 5,
    withheld: int = 1,
    seed: int = 0,
) -> MemoryEnsemble:
    """Noise about a mean that bends, so that nothing is symmetric and nothing vanishes."""
    random = np.random.default_rng(seed)
    shape = (times, members, *grid.shape)
    xx, yy = np.meshgrid(grid.x / grid.x[-1], grid.y / grid.y[-1])
    values = {
        "x_velocity": 0.1 * random.normal(size=shape) + np.sin(3.0 * yy),
        "y_velocity": 0.1 * random.normal(size=shape) + 0.1 * xx,
    }
    names = tuple(f"dye_{letter}" for letter in "abcdefgh"[:tracers])
    for number, name in enumerate(names):
        mean = np.cos(2.0 * number + 2.0 * xx) + np.sin(1.3 * number - 2.5 * yy)
        eddy = -0.4 * (
            values["x_velocity"] * np.cos(number) + values["y_velocity"] * np.sin(number)
        )
        values[name] = mean + eddy + 0.02 * random.normal(size=shape)
    used = tracers - withheld
    return MemoryEnsemble(grid, values, names[:used], names[used:])
