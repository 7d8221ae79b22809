"""Features of topography, jets, coasts and resolution: where a point lies."""

from __future__ import annotations

from typing import Any

from learnclosure.features.point import Point, feature

CORE_EDGE = 1.0
FLANK_EDGE = 2.5
"""Distances from the axis in jet widths where the core and the flanks of a jet end."""
FARTHEST_LAND = 50.0
FARTHEST_PROFILE = 100.0
"""Square of the distance in widths beyond which a jet's profile is no longer followed."""


@feature
def topographic_beta_across(p: Point) -> Any:
    """Topographic beta along the first axis over beta."""
    slope = p.in_frame(*p.pair("topographic_beta"))[0]
    return p.bounded(p.hemisphere * slope * p.radius * p.radius / p.drift)


@feature
def topographic_beta_along(p: Point) -> Any:
    """Topographic beta along the second axis over beta."""
    slope = p.in_frame(*p.pair("topographic_beta"))[1]
    return p.bounded(p.hemisphere * slope * p.radius * p.radius / p.drift)


@feature
def topographic_steepness(p: Point) -> Any:
    """Change of depth over a deformation radius as a share of the depth.

    ``|grad D| / D`` is the size of topographic beta over that of f.
    """
    slope = p.length(*p.pair("topographic_beta"))
    return p.bounded(slope * p.radius / p.coriolis)


@feature
def slope_ratio(p: Point) -> Any:
    """Slope of the sea floor along that of isoneutral surfaces, over the latter.

    The sea floor stands at ``z = -D``, so its slope is ``-grad D``; with the isoneutral
    slope s, both upward, the ratio is ``-grad D . s / s^2``.
    """
    down = p.pair("topographic_slope")
    slope = p.isoneutral_slope
    size = p.length(*slope)
    along = p.share(down[0] * slope[0] + down[1] * slope[1], size)
    return p.bounded(-p.share(along, size))


@feature
def depth_contour_across(p: Point) -> Any:
    """Gradient of f/H along the first axis, over its size."""
    across = p.in_frame(*p.depth_contours)[0]
    return p.hemisphere * p.share(across, p.length(*p.depth_contours))


@feature
def depth_contour_along(p: Point) -> Any:
    """Gradient of f/H along the second axis, over its size."""
    along = p.in_frame(*p.depth_contours)[1]
    return p.hemisphere * p.share(along, p.length(*p.depth_contours))


@feature
def depth_contour_crossing(p: Point) -> Any:
    """Cosine of the angle between flow and gradient of f/H."""
    return p.hemisphere * p.cosine(p.flow, p.depth_contours)


@feature
def jet_distance(p: Point) -> Any:
    """Signed distance from the jet axis of the section in jet widths."""
    return p.hemisphere * p["jet_distance"]


@feature
def jet_width_ratio(p: Point) -> Any:
    """Jet width over deformation radius."""
    return p.bounded(p["jet_width"] / p.radius)


@feature
def jet_speed_ratio(p: Point) -> Any:
    """Jet speed over the drift of long waves."""
    return p.bounded(p["jet_speed"] / p.drift)


@feature
def axis_distance(p: Point) -> Any:
    """Signed distance from the nearest jet axis in jet widths, following meanders."""
    return p.hemisphere * p["axis_distance"]


@feature
def axis_width_ratio(p: Point) -> Any:
    """Width of the nearest jet over deformation radius."""
    return p.bounded(p["axis_width"] / p.radius)


@feature
def axis_speed_ratio(p: Point) -> Any:
    """Speed on the nearest jet axis over the drift of long waves."""
    return p.bounded(p["axis_speed"] / p.drift)


@feature
def jet_zone(p: Point) -> Any:
    """Core, flank or neither."""
    away = p.xp.abs(p["axis_distance"])
    zone = p.xp.where(away < CORE_EDGE, 2.0, p.xp.where(away < FLANK_EDGE, 1.0, 0.0))
    return p.xp.where(p["axis_presence"] > 0.5, zone, 0.0)


@feature
def jet_profile(p: Point) -> Any:
    """Profile of the nearest jet at the point."""
    away = p["axis_distance"]
    profile = p.xp.exp(-p.xp.minimum(away * away, FARTHEST_PROFILE))
    return p.xp.where(p["axis_presence"] > 0.5, profile, 0.0)


@feature
def along_axis_distance(p: Point) -> Any:
    """Distance downstream of where the nearest jet is fastest, in jet widths."""
    return p["along_axis_distance"]


@feature
def axis_across(p: Point) -> Any:
    """Direction of the nearest jet axis along the first axis."""
    return p.in_frame(*p.pair("axis_direction"))[0]


@feature
def axis_along(p: Point) -> Any:
    """Direction of the nearest jet axis along the second axis."""
    return p.in_frame(*p.pair("axis_direction"))[1]


@feature
def land_distance_ratio(p: Point) -> Any:
    """Distance to the nearest coast or wall over deformation radius."""
    return p.xp.minimum(p["land_distance"] / p.radius, FARTHEST_LAND)


@feature
def resolution_ratio(p: Point) -> Any:
    """Cell width over deformation radius."""
    return p.bounded(p["cell_width"] / p.radius)
