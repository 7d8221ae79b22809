"""Features of stratification, instability and position in the column."""

from __future__ import annotations

from typing import Any

from learnclosure.features.point import Point, feature
from learnclosure.features.scales import rhines_length_of

LARGEST_LOG_RICHARDSON = 30.0
LARGEST_BURGER = 1e3
LEAST_SHEAR_SQUARED = 1e-30
LEAST_WIDTH = 1.0


@feature
def deformation_radius(p: Point) -> Any:
    """First deformation radius."""
    return p.radius


@feature
def log_richardson_number(p: Point) -> Any:
    """Logarithm of the Richardson number of the mean flow."""
    square = p.xp.maximum(p.shear_rate * p.shear_rate, LEAST_SHEAR_SQUARED)
    return p.xp.minimum(p.xp.log(p.stability / square), LARGEST_LOG_RICHARDSON)


@feature
def log_frequency_ratio(p: Point) -> Any:
    """Logarithm of N over f."""
    return 0.5 * p.xp.log(p.stability / (p.coriolis * p.coriolis))


@feature
def burger_number(p: Point) -> Any:
    """Square of deformation radius over jet width."""
    ratio = p.radius / p.xp.maximum(p["axis_width"], LEAST_WIDTH)
    return p.xp.minimum(ratio * ratio, LARGEST_BURGER)


@feature
def wkb_radius_ratio(p: Point) -> Any:
    """Approximate over exact deformation radius."""
    return p.bounded(p["wkb_deformation_radius"] / p.radius)


@feature
def second_radius_ratio(p: Point) -> Any:
    """Second over first deformation radius."""
    return p.bounded(p["second_deformation_radius"] / p.radius)


@feature
def flow_froude_number(p: Point) -> Any:
    """Speed over that of long gravity waves."""
    return p.bounded(p.speed / (p.coriolis * p.radius))


@feature
def eady_growth_rate(p: Point) -> Any:
    """Eady growth rate."""
    return p["eady_growth_rate"]


@feature
def eady_diffusivity(p: Point) -> Any:
    """Eady growth rate times deformation radius squared."""
    return p["eady_growth_rate"] * p.radius * p.radius


@feature
def charney_green_number(p: Point) -> Any:
    """Charney-Green number."""
    return p["charney_green_number"]


@feature
def phillips_criticality(p: Point) -> Any:
    """Shear over the least unstable one."""
    return p["phillips_criticality"]


@feature
def pv_gradient_reversal(p: Point) -> Any:
    """Least cosine between potential vorticity gradients of the column."""
    return p["pv_gradient_reversal"]


@feature
def eady_coriolis_ratio(p: Point) -> Any:
    """Eady growth rate over f."""
    return p["eady_growth_rate"] / p.coriolis


@feature
def eady_drift_ratio(p: Point) -> Any:
    """Speed of Eady growth over the drift of long waves."""
    return p.bounded(p["eady_growth_rate"] * p.radius / p.drift)


@feature
def flow_rhines_ratio(p: Point) -> Any:
    """Rhines length of the mean flow over deformation radius."""
    return rhines_length_of(p.xp, p.speed, p.beta) / p.radius


@feature
def layer_index(p: Point) -> Any:
    """Return the number of the layer."""
    return p["layer_index"]


@feature
def depth_share(p: Point) -> Any:
    """Depth of the middle of the layer over the depth of the column."""
    return p["depth_share"]


@feature
def thickness_share(p: Point) -> Any:
    """Thickness of the layer over the depth of the column."""
    return p["thickness_share"]


@feature
def mode_amplitude(p: Point) -> Any:
    """First baroclinic mode of pressure in the layer."""
    return p["mode_amplitude"]
