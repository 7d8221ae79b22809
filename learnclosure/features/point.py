"""What the features of a point are made of, and the register of the functions that make them."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import cached_property
from typing import Any

from learnclosure.features.frames import Axes, Frame, frame_axes, vector_to_frame
from learnclosure.features.scales import eddy_speed, planetary_beta

LEAST_CORIOLIS = 1e-6
LEAST_DRIFT = 1e-4
LEAST_SPEED = 1e-4
LEAST_RADIUS = 100.0
LEAST_GRADIENT_SUM = 1e-13
LEAST_STABILITY = 1e-12
LARGEST_RATIO = 1e3
TINY = 1e-300
"""Least product of two sizes a cosine is divided by."""


class Point:
    """Inputs of points in the local frame, with what several features share.

    Everything is computed when first asked for, so that a closure needs only the inputs
    its features use. The same code runs in NumPy and in the graph.

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    inputs : mapping of str to array
        Rows of ``quantities.INPUTS`` in SI units.
    frame : {"pv-gradient", "flow", "jet", "fixed"}, optional
    """

    def __init__(self, xp: Any, inputs: Mapping[str, Any], frame: Frame = "pv-gradient") -> None:
        self.xp = xp
        self.inputs = inputs
        self.frame: Frame = frame

    def __getitem__(self, name: str) -> Any:
        return self.inputs[name]

    def bounded(self, value: Any) -> Any:
        """Hold a ratio between -1000 and 1000."""
        xp = self.xp
        return xp.minimum(xp.maximum(value, -LARGEST_RATIO), LARGEST_RATIO)

    def length(self, along_x: Any, along_y: Any) -> Any:
        """Length of a vector."""
        return self.xp.sqrt(along_x * along_x + along_y * along_y)

    def pair(self, name: str) -> tuple[Any, Any]:
        """Model components of a vector whose rows end in ``_x`` and ``_y``."""
        return self.inputs[f"{name}_x"], self.inputs[f"{name}_y"]

    def in_frame(self, x: Any, y: Any) -> tuple[Any, Any]:
        """Components of a vector in the local frame."""
        return vector_to_frame(self.xp, self.axes, x, y)

    def cosine(self, a: tuple[Any, Any], b: tuple[Any, Any]) -> Any:
        """Cosine of the angle between two vectors, zero where one of them vanishes."""
        sizes = self.length(*a) * self.length(*b)
        return (a[0] * b[0] + a[1] * b[1]) / self.xp.maximum(sizes, TINY)

    def share(self, part: Any, whole: Any) -> Any:
        """Ratio of two sizes, zero where the whole vanishes."""
        return part / self.xp.maximum(whole, TINY)

    @cached_property
    def axes(self) -> Axes:
        """Local frame."""
        return frame_axes(self.xp, self.inputs, self.frame)

    @cached_property
    def hemisphere(self) -> Any:
        """Sign of the Coriolis parameter, 1 at the equator."""
        return self.xp.where(self["coriolis_parameter"] < 0.0, -1.0, 1.0)

    @cached_property
    def coriolis(self) -> Any:
        """Size of the Coriolis parameter, s-1, at least 1e-6."""
        return self.xp.maximum(self.xp.abs(self["coriolis_parameter"]), LEAST_CORIOLIS)

    @cached_property
    def radius(self) -> Any:
        """First deformation radius, m."""
        return self.xp.maximum(self["deformation_radius"], LEAST_RADIUS)

    @cached_property
    def beta(self) -> Any:
        """Size of the gradient of the Coriolis parameter, m-1 s-1."""
        return planetary_beta(self.xp, self.inputs)

    @cached_property
    def drift(self) -> Any:
        """Speed of long Rossby waves ``beta Ld2``, m s-1, at least 1e-4."""
        return self.xp.maximum(self.beta * self.radius * self.radius, LEAST_DRIFT)

    @cached_property
    def flow(self) -> tuple[Any, Any]:
        """Mean velocity on model axes, m s-1."""
        return self["x_velocity"], self["y_velocity"]

    @cached_property
    def speed(self) -> Any:
        """Speed of the mean flow, m s-1."""
        return self.length(*self.flow)

    @cached_property
    def flow_in_frame(self) -> tuple[Any, Any]:
        """Mean velocity in the frame, m s-1."""
        return self.in_frame(*self.flow)

    @cached_property
    def shear(self) -> Any:
        """Size of the shear between layers, m s-1."""
        return self.length(*self.pair("shear"))

    @cached_property
    def shear_in_frame(self) -> tuple[Any, Any]:
        """Shear between layers in the frame, m s-1."""
        return self.in_frame(*self.pair("shear"))

    @cached_property
    def shear_rate(self) -> Any:
        """Size of the vertical derivative of the mean flow, s-1."""
        return self.length(*self.pair("shear_rate"))

    @cached_property
    def vorticity(self) -> Any:
        """Relative vorticity, s-1."""
        return self["velocity_gradient_yx"] - self["velocity_gradient_xy"]

    @cached_property
    def strain_on_axes(self) -> tuple[Any, Any]:
        """Normal and shear strain on model axes, s-1."""
        return (
            self["velocity_gradient_xx"] - self["velocity_gradient_yy"],
            self["velocity_gradient_yx"] + self["velocity_gradient_xy"],
        )

    @cached_property
    def strain_in_frame(self) -> tuple[Any, Any]:
        """Normal and shear strain in the local frame, s-1.

        A turn of the axes by an angle turns (normal, shear) by twice that angle; with n as
        first axis the cosine of the double angle is ``nx^2 - ny^2``, its sine ``2 nx ny``.
        """
        axes = self.axes
        normal, shear = self.strain_on_axes
        cosine = axes.nx * axes.nx - axes.ny * axes.ny
        sine = 2.0 * axes.nx * axes.ny
        # The frame's handedness, +1 or -1: t is n turned by a right angle times it.
        handed = axes.nx * axes.ty - axes.ny * axes.tx
        return cosine * normal + sine * shear, handed * (cosine * shear - sine * normal)

    @cached_property
    def strain(self) -> Any:
        """Size of the strain rate, s-1."""
        return self.length(*self.strain_on_axes)

    @cached_property
    def pv_gradient(self) -> Any:
        """Size of the potential vorticity gradient, m-1 s-1."""
        return self.length(*self.pair("pv_gradient"))

    @cached_property
    def gradient_sum(self) -> Any:
        """Sizes of potential vorticity gradient and beta together, m-1 s-1.

        Both in a denominator keep a ratio bounded where one of them vanishes.
        """
        return self.xp.maximum(self.pv_gradient + self.beta, LEAST_GRADIENT_SUM)

    @cached_property
    def depth_contours(self) -> tuple[Any, Any]:
        """Gradient of f/H times H on model axes, m-1 s-1."""
        planetary, topographic = self.pair("planetary_beta"), self.pair("topographic_beta")
        return planetary[0] + topographic[0], planetary[1] + topographic[1]

    @cached_property
    def stability(self) -> Any:
        """Square of the buoyancy frequency, s-2, so that it can divide."""
        return self.xp.maximum(self["buoyancy_frequency_squared"], LEAST_STABILITY)

    @cached_property
    def isoneutral_slope(self) -> tuple[Any, Any]:
        """Slope of isoneutral surfaces on model axes, in thermal wind balance.

        With ``f dU/dz = zhat x grad b`` and ``s = -grad b / N2`` it is
        ``s = (-f dv/dz, f du/dz) / N2``.
        """
        rate_x, rate_y = self.pair("shear_rate")
        factor = self["coriolis_parameter"] / self.stability
        return -(factor * rate_y), factor * rate_x

    @cached_property
    def eddy_speed(self) -> Any:
        """Eddy speed of the layer, m s-1."""
        return self.xp.maximum(eddy_speed(self.xp, self["eddy_kinetic_energy"]), LEAST_SPEED)

    @cached_property
    def column_eddy_speed(self) -> Any:
        """Eddy speed of the column, m s-1."""
        energy = self["eddy_kinetic_energy_column"]
        return self.xp.maximum(eddy_speed(self.xp, energy), LEAST_SPEED)


Feature = Callable[[Point], Any]

FUNCTIONS: dict[str, Feature] = {}
"""Functions of features by the names of their rows; filled by ``feature``."""


def feature(function: Feature) -> Feature:
    """Register the function of a feature under its own name.

    Parameters
    ----------
    function : callable
        Takes a ``Point``, returns the feature; named as its row of ``FEATURES``.

    Returns
    -------
    callable
        The function itself.

    Raises
    ------
    AssertionError
        If a feature of that name has a function already.
    """
    if function.__name__ in FUNCTIONS:
        raise AssertionError(f"feature {function.__name__} has two functions")
    FUNCTIONS[function.__name__] = function
    return function
