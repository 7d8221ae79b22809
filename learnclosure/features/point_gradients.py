"""Features of the gradients of the mean state and of its shear."""

from __future__ import annotations

from typing import Any

from learnclosure.features.point import Point, feature

STEEPEST_SLOPE = 1.0


@feature
def speed(p: Point) -> Any:
    """Speed of the mean flow."""
    return p.speed


@feature
def pv_gradient(p: Point) -> Any:
    """Size of the potential vorticity gradient."""
    return p.pv_gradient


@feature
def flow_across_ratio(p: Point) -> Any:
    """Flow along the first axis over the drift of long waves."""
    return p.bounded(p.flow_in_frame[0] / p.drift)


@feature
def flow_along_ratio(p: Point) -> Any:
    """Flow along the second axis over the drift of long waves."""
    return p.bounded(p.flow_in_frame[1] / p.drift)


@feature
def rossby_number(p: Point) -> Any:
    """Relative vorticity over f."""
    return p.hemisphere * p.vorticity / p.coriolis


@feature
def normal_strain_ratio(p: Point) -> Any:
    """Strain along the first axis against the second, in the frame over f."""
    return p.strain_in_frame[0] / p.coriolis


@feature
def shear_strain_ratio(p: Point) -> Any:
    """Shear strain in the frame over f."""
    return p.strain_in_frame[1] / p.coriolis


@feature
def okubo_weiss_ratio(p: Point) -> Any:
    """Okubo-Weiss parameter over f squared."""
    squares = p.strain * p.strain - p.vorticity * p.vorticity
    return squares / (p.coriolis * p.coriolis)


@feature
def pv_gradient_ratio(p: Point) -> Any:
    """Potential vorticity gradient over beta."""
    return p.bounded(p.pv_gradient * p.radius * p.radius / p.drift)


@feature
def planetary_beta_across(p: Point) -> Any:
    """Beta along the first axis over the sizes of both gradients."""
    return p.hemisphere * p.in_frame(*p.pair("planetary_beta"))[0] / p.gradient_sum


@feature
def planetary_beta_along(p: Point) -> Any:
    """Beta along the second axis over the sizes of both gradients."""
    return p.hemisphere * p.in_frame(*p.pair("planetary_beta"))[1] / p.gradient_sum


@feature
def strain_ratio(p: Point) -> Any:
    """Size of the strain rate over f."""
    return p.strain / p.coriolis


@feature
def divergence_ratio(p: Point) -> Any:
    """Divergence over f."""
    return (p["velocity_gradient_xx"] + p["velocity_gradient_yy"]) / p.coriolis


@feature
def gradient_determinant(p: Point) -> Any:
    """Return the determinant of the velocity gradient tensor over f squared."""
    determinant = (
        p["velocity_gradient_xx"] * p["velocity_gradient_yy"]
        - p["velocity_gradient_xy"] * p["velocity_gradient_yx"]
    )
    return determinant / (p.coriolis * p.coriolis)


@feature
def strain_balance(p: Point) -> Any:
    """Strain against vorticity, from -1 to 1."""
    turning = p.xp.abs(p.vorticity)
    return p.share(p.strain - turning, p.strain + turning)


@feature
def strain_along_flow(p: Point) -> Any:
    """Stretching along the flow, over the largest of any direction."""
    u, v = p.flow
    normal, shear = p.strain_on_axes
    stretching = (u * u - v * v) * normal + 2.0 * u * v * shear
    return p.share(stretching, p.speed * p.speed * p.strain)


@feature
def vorticity_gradient_across(p: Point) -> Any:
    """Gradient of vorticity along the first axis."""
    across = p.in_frame(*p.pair("vorticity_gradient"))[0]
    return p.bounded(p.hemisphere * across / p.gradient_sum)


@feature
def vorticity_gradient_along(p: Point) -> Any:
    """Gradient of vorticity along the second axis."""
    along = p.in_frame(*p.pair("vorticity_gradient"))[1]
    return p.bounded(p.hemisphere * along / p.gradient_sum)


@feature
def buoyancy_gradient_ratio(p: Point) -> Any:
    """Horizontal buoyancy gradient over f squared, ``|dU/dz| / |f|``."""
    return p.bounded(p.shear_rate / p.coriolis)


def _held_slope(p: Point, slope: Any) -> Any:
    return p.xp.minimum(p.xp.maximum(slope, -STEEPEST_SLOPE), STEEPEST_SLOPE)


@feature
def isoneutral_slope_across(p: Point) -> Any:
    """Isoneutral slope along the first axis."""
    return _held_slope(p, p.in_frame(*p.isoneutral_slope)[0])


@feature
def isoneutral_slope_along(p: Point) -> Any:
    """Isoneutral slope along the second axis."""
    return _held_slope(p, p.in_frame(*p.isoneutral_slope)[1])


@feature
def vertical_shear(p: Point) -> Any:
    """Shear between layers."""
    return p.shear


@feature
def shear_diffusivity(p: Point) -> Any:
    """Shear between layers times deformation radius."""
    return p.shear * p.radius


@feature
def shear_across_ratio(p: Point) -> Any:
    """Shear along the first axis over the drift of long waves."""
    return p.bounded(p.shear_in_frame[0] / p.drift)


@feature
def shear_along_ratio(p: Point) -> Any:
    """Shear along the second axis over the drift of long waves."""
    return p.bounded(p.shear_in_frame[1] / p.drift)


@feature
def shear_flow_cosine(p: Point) -> Any:
    """Cosine of the angle between flow and shear."""
    return p.cosine(p.flow, p.pair("shear"))


@feature
def shear_flow_sine(p: Point) -> Any:
    """Sine of the angle from flow to shear."""
    u, v = p.flow
    return p.hemisphere * p.cosine((-v, u), p.pair("shear"))


def _along(p: Point, a: tuple[Any, Any], b: tuple[Any, Any]) -> Any:
    """Increase along b of the velocity component along a, ``a . grad(U) . b``."""
    grown_x = p["velocity_gradient_xx"] * b[0] + p["velocity_gradient_xy"] * b[1]
    grown_y = p["velocity_gradient_yx"] * b[0] + p["velocity_gradient_yy"] * b[1]
    return a[0] * grown_x + a[1] * grown_y


@feature
def lateral_shear_ratio(p: Point) -> Any:
    """Increase of speed to the left of the flow over f."""
    u, v = p.flow
    across = p.share(_along(p, (u, v), (-v, u)), p.speed * p.speed)
    return p.hemisphere * across / p.coriolis


@feature
def acceleration_ratio(p: Point) -> Any:
    """Increase of speed along the flow over f."""
    return p.share(_along(p, p.flow, p.flow), p.speed * p.speed) / p.coriolis


def _relative(p: Point) -> tuple[Any, Any]:
    """Flow relative to the mean of the column on model axes, m s-1."""
    column = p.pair("column_velocity")
    return p.flow[0] - column[0], p.flow[1] - column[1]


@feature
def relative_flow_across(p: Point) -> Any:
    """Flow relative to the column along the first axis."""
    return p.bounded(p.in_frame(*_relative(p))[0] / p.drift)


@feature
def relative_flow_along(p: Point) -> Any:
    """Flow relative to the column along the second axis."""
    return p.bounded(p.in_frame(*_relative(p))[1] / p.drift)


@feature
def column_flow_share(p: Point) -> Any:
    """Energy of the column's mean flow over all of the flow's energy."""
    column, relative = p.length(*p.pair("column_velocity")), p.length(*_relative(p))
    return p.share(column * column, column * column + relative * relative)
