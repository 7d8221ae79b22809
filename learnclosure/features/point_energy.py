"""Features of closures whose host gives eddy energy."""

from __future__ import annotations

from typing import Any

from learnclosure.features.point import Point, feature
from learnclosure.features.scales import rhines_length


@feature
def eddy_speed_share(p: Point) -> Any:
    """Eddy speed of the layer over that of the column."""
    return p.bounded(p.eddy_speed / p.column_eddy_speed)


@feature
def flow_across_eddy_ratio(p: Point) -> Any:
    """Flow along the first axis over eddy speed."""
    return p.bounded(p.flow_in_frame[0] / p.eddy_speed)


@feature
def flow_along_eddy_ratio(p: Point) -> Any:
    """Flow along the second axis over eddy speed."""
    return p.bounded(p.flow_in_frame[1] / p.eddy_speed)


@feature
def eddy_energy_gradient_across(p: Point) -> Any:
    """Gradient of log eddy energy along the first axis."""
    return p.bounded(p.in_frame(*p.pair("eddy_energy_gradient"))[0] * p.radius)


@feature
def eddy_energy_gradient_along(p: Point) -> Any:
    """Gradient of log eddy energy along the second axis."""
    return p.bounded(p.in_frame(*p.pair("eddy_energy_gradient"))[1] * p.radius)


@feature
def eddy_energy_gradient(p: Point) -> Any:
    """Size of the gradient of log eddy energy."""
    return p.bounded(p.length(*p.pair("eddy_energy_gradient")) * p.radius)


@feature
def rhines_length_ratio(p: Point) -> Any:
    """Rhines length of the column's eddies over deformation radius."""
    return rhines_length(p.xp, p.inputs) / p.radius


@feature
def eddy_rossby_number(p: Point) -> Any:
    """Eddy speed of the column over f times deformation radius."""
    return p.bounded(p.column_eddy_speed / (p.coriolis * p.radius))


@feature
def eady_growth_ratio(p: Point) -> Any:
    """Eady growth rate times deformation radius over eddy speed."""
    return p.bounded(p["eady_growth_rate"] * p.radius / p.column_eddy_speed)


@feature
def eddy_criticality(p: Point) -> Any:
    """Eddy speed of the column over the drift of long waves."""
    return p.bounded(p.column_eddy_speed / p.drift)
