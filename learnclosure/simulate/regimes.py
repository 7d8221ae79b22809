"""The regimes of the built-in channel: every parameter of the simulated flow in one place."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields

from learnclosure.errors import InputError

DAY = 86400.0
MAY_BE_INFINITE = ("drag_days", "relaxation_days", "tracer_relaxation_days")
MAY_BE_ZERO = ("jet_speed", "beta", "ridge_height", "ridge_position", "noise_speed")


@dataclass(frozen=True)
class ChannelRegime:
    """All parameters of one two-layer quasi-geostrophic channel.

    Attributes
    ----------
    name : str
        Name of the region.
    deformation_radius : float, m
        ``sqrt(g' H1 H2 / (H1 + H2)) / f``.
    jet_speed, jet_width : float, m s-1 and m
        The upper layer is drawn towards ``jet_speed exp(-((y - Ly/2)/jet_width)^2) +
        background_speed``; the lower layer towards rest.
    background_speed : float, m s-1
        Uniform part of that shear.
    beta : float, m-1 s-1
        Northward gradient of the Coriolis parameter.
    ridge_height : float, m
        Height of the meridional ridge in mid-channel.
    ridge_position : float
        Where the ridge crosses mid-channel, as a share of the channel's length.
    ridge_tilt : float
        Shift of its crest along x per unit of y.
    ridge_width : float, m
        E-folding half width of its Gaussian section.
    drag_days : float, days
        Decay time of the lower layer's vorticity by bottom drag.
    relaxation_days : float, days
        Time in which the zonal-mean interface is drawn back to the jet's.
    tracer_relaxation_days : float, days
        Time in which a tracer is drawn back to its target.
    noise_speed : float, m s-1
        Root mean square speed of the noise each member starts with.
    time_step : float, s
        A whole number of steps must make a day.
    columns, rows : int
        Cells along x and y, both even.
    spacing : float, m
        Cell width.
    coriolis_parameter : float, s-1
    upper_thickness, lower_thickness : float, m

    Raises
    ------
    InputError
        If a parameter is outside what the scheme can represent.
    """

    name: str
    deformation_radius: float
    jet_speed: float
    jet_width: float
    beta: float
    ridge_height: float
    ridge_position: float
    drag_days: float
    ridge_tilt: float = 0.0
    time_step: float = 2400.0
    background_speed: float = 0.02
    ridge_width: float = 120.0e3
    relaxation_days: float = 30.0
    tracer_relaxation_days: float = 60.0
    noise_speed: float = 0.02
    columns: int = 128
    rows: int = 64
    spacing: float = 15.0e3
    coriolis_parameter: float = 1.0e-4
    upper_thickness: float = 1000.0
    lower_thickness: float = 3000.0

    def __post_init__(self) -> None:
        for field in fields(self):
            value = getattr(self, field.name)
            if isinstance(value, str) or field.name in ("ridge_tilt", "background_speed"):
                continue
            lowest = 0.0 if field.name in MAY_BE_ZERO else math.nextafter(0.0, 1.0)
            finite = math.isfinite(value) or (value > 0 and field.name in MAY_BE_INFINITE)
            if not finite or value < lowest:
                self._refuse(field.name, value, "a finite positive number")
        if self.columns % 2 or self.rows % 2 or min(self.columns, self.rows) < 6:
            self._refuse("columns, rows", (self.columns, self.rows), "even numbers from 6 up")
        if abs(DAY / self.time_step - self.steps_per_day) > 1e-9:
            self._refuse("time_step", self.time_step, "a whole number of steps in 86400 s")

    def _refuse(self, parameter: str, found: object, expected: str) -> None:
        raise InputError(
            "channel parameter out of range",
            where=f"{self.name}: {parameter}",
            found=found,
            expected=expected,
            remedy="correct the regime",
        )

    @property
    def steps_per_day(self) -> int:
        """Number of time steps in a day."""
        return max(1, round(DAY / self.time_step))

    @property
    def length(self) -> float:
        """Length of the box along x, m."""
        return self.columns * self.spacing

    @property
    def width(self) -> float:
        """Width of the box along y, m."""
        return self.rows * self.spacing

    @property
    def thicknesses(self) -> tuple[float, float]:
        """Resting thickness of the upper and the lower layer, m."""
        return self.upper_thickness, self.lower_thickness

    @property
    def reduced_gravity(self) -> float:
        """Reduced gravity of the interface, m s-2."""
        upper, lower = self.thicknesses
        speed = self.coriolis_parameter * self.deformation_radius
        return speed * speed * (upper + lower) / (upper * lower)

    @property
    def coupling(self) -> tuple[float, float]:
        """Stretching coefficients ``F_i = f^2 / (g' H_i)`` of both layers, m-2."""
        squared = self.coriolis_parameter**2 / self.reduced_gravity
        return squared / self.upper_thickness, squared / self.lower_thickness


DEMO_REGIMES: tuple[ChannelRegime, ...] = (
    ChannelRegime(
        "alder", deformation_radius=35.0e3, jet_speed=0.40, jet_width=80.0e3, beta=2.0e-11,
        ridge_height=400.0, ridge_position=0.30, drag_days=60.0,
    ),
    ChannelRegime(
        "hazel", deformation_radius=30.0e3, jet_speed=0.32, jet_width=70.0e3, beta=1.6e-11,
        ridge_height=250.0, ridge_position=0.35, ridge_tilt=0.3, drag_days=50.0,
        time_step=2880.0,
    ),
    ChannelRegime(
        "rowan", deformation_radius=42.0e3, jet_speed=0.45, jet_width=100.0e3, beta=1.3e-11,
        ridge_height=600.0, ridge_position=0.45, drag_days=40.0, time_step=1800.0,
    ),
    ChannelRegime(
        "larch", deformation_radius=33.0e3, jet_speed=0.37, jet_width=85.0e3, beta=1.7e-11,
        ridge_height=350.0, ridge_position=0.40, drag_days=50.0,
    ),
)  # fmt: skip
"""Four invented regimes: three to train on and one to hold out."""

HELD_OUT = "larch"
"""Name of the regime the demonstration never trains on."""
