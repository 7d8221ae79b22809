"""Features of a closure from its inputs at a point, written once for NumPy and the graph.

Closures of the mean field see dimensional amplitudes, since nothing else tells them how
strong the eddies are. Closures that are given eddy energy learn a tensor without
dimension and see pure numbers only.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from learnclosure.features.frames import Axes, frame_axes, vector_to_frame
from learnclosure.features.scales import eddy_speed, planetary_beta, rhines_length
from learnclosure.quantities import FEATURES, Quantity

LEAST_CORIOLIS = 1e-6
LEAST_DRIFT = 1e-4
LEAST_SPEED = 1e-4
LEAST_RADIUS = 100.0
LEAST_GRADIENT_SUM = 1e-13
LARGEST_RATIO = 1e3


def _bounded(xp: Any, value: Any) -> Any:
    return xp.minimum(xp.maximum(value, -LARGEST_RATIO), LARGEST_RATIO)


def _length(xp: Any, along_n: Any, along_t: Any) -> Any:
    return xp.sqrt(along_n * along_n + along_t * along_t)


def _strain_in_frame(axes: Axes, inputs: Mapping[str, Any]) -> tuple[Any, Any]:
    """Turn normal and shear strain into the local frame, s-1.

    A turn of the axes by an angle turns (normal, shear) by twice that angle; with n as
    first axis the cosine of the double angle is ``nx^2 - ny^2``, its sine ``2 nx ny``.
    """
    normal = inputs["velocity_gradient_xx"] - inputs["velocity_gradient_yy"]
    shear = inputs["velocity_gradient_yx"] + inputs["velocity_gradient_xy"]
    cosine = axes.nx * axes.nx - axes.ny * axes.ny
    sine = 2.0 * axes.nx * axes.ny
    # The frame's handedness, +1 or -1: t is n turned by a right angle times it.
    handed = axes.nx * axes.ty - axes.ny * axes.tx
    return cosine * normal + sine * shear, handed * (cosine * shear - sine * normal)


def _shared(xp: Any, axes: Axes, inputs: Mapping[str, Any]) -> dict[str, Any]:
    """Features of both kinds of closures, pure numbers."""
    coriolis = xp.maximum(xp.abs(inputs["coriolis_parameter"]), LEAST_CORIOLIS)
    hemisphere = xp.where(inputs["coriolis_parameter"] < 0.0, -1.0, 1.0)
    radius = xp.maximum(inputs["deformation_radius"], LEAST_RADIUS)
    beta = planetary_beta(xp, inputs)
    drift = xp.maximum(beta * radius * radius, LEAST_DRIFT)
    vorticity = inputs["velocity_gradient_yx"] - inputs["velocity_gradient_xy"]
    normal, shear = _strain_in_frame(axes, inputs)
    strain = _length(xp, normal, shear)
    pv_gradient = _length(xp, inputs["pv_gradient_x"], inputs["pv_gradient_y"])
    shear_n, shear_t = vector_to_frame(xp, axes, inputs["shear_x"], inputs["shear_y"])
    flow_n, flow_t = vector_to_frame(xp, axes, inputs["x_velocity"], inputs["y_velocity"])
    beta_n, beta_t = vector_to_frame(
        xp, axes, inputs["planetary_beta_x"], inputs["planetary_beta_y"]
    )
    slope_n, slope_t = vector_to_frame(
        xp, axes, inputs["topographic_beta_x"], inputs["topographic_beta_y"]
    )
    # Both sizes in the denominator keep the ratio bounded where the gradient vanishes.
    both = xp.maximum(pv_gradient + beta, LEAST_GRADIENT_SUM)
    return {
        "flow_across_ratio": _bounded(xp, flow_n / drift),
        "flow_along_ratio": _bounded(xp, flow_t / drift),
        "shear_across_ratio": _bounded(xp, shear_n / drift),
        "shear_along_ratio": _bounded(xp, shear_t / drift),
        "rossby_number": hemisphere * vorticity / coriolis,
        "normal_strain_ratio": normal / coriolis,
        "shear_strain_ratio": shear / coriolis,
        "okubo_weiss_ratio": (strain * strain - vorticity * vorticity) / (coriolis * coriolis),
        "pv_gradient_ratio": _bounded(xp, pv_gradient * radius * radius / drift),
        "planetary_beta_across": hemisphere * beta_n / both,
        "planetary_beta_along": hemisphere * beta_t / both,
        "topographic_beta_across": _bounded(xp, hemisphere * slope_n * radius * radius / drift),
        "topographic_beta_along": _bounded(xp, hemisphere * slope_t * radius * radius / drift),
        "charney_green_number": inputs["charney_green_number"],
        "jet_distance": hemisphere * inputs["jet_distance"],
        "jet_width_ratio": _bounded(xp, inputs["jet_width"] / radius),
        "jet_speed_ratio": _bounded(xp, inputs["jet_speed"] / drift),
        "layer_index": inputs["layer_index"],
        "depth_share": inputs["depth_share"],
    }


def _amplitudes(xp: Any, inputs: Mapping[str, Any]) -> dict[str, Any]:
    """Dimensional features, which stand for the strength of eddies nobody gives."""
    radius = xp.maximum(inputs["deformation_radius"], LEAST_RADIUS)
    growth = inputs["eady_growth_rate"]
    shear = _length(xp, inputs["shear_x"], inputs["shear_y"])
    return {
        "speed": _length(xp, inputs["x_velocity"], inputs["y_velocity"]),
        "vertical_shear": shear,
        "pv_gradient": _length(xp, inputs["pv_gradient_x"], inputs["pv_gradient_y"]),
        "deformation_radius": radius,
        "eady_growth_rate": growth,
        "eady_diffusivity": growth * radius * radius,
        "shear_diffusivity": shear * radius,
    }


def _energy(xp: Any, axes: Axes, inputs: Mapping[str, Any]) -> dict[str, Any]:
    """Features of closures whose host gives eddy energy, pure numbers."""
    radius = xp.maximum(inputs["deformation_radius"], LEAST_RADIUS)
    speed = xp.maximum(eddy_speed(xp, inputs["eddy_kinetic_energy"]), LEAST_SPEED)
    column = xp.maximum(eddy_speed(xp, inputs["eddy_kinetic_energy_column"]), LEAST_SPEED)
    coriolis = xp.maximum(xp.abs(inputs["coriolis_parameter"]), LEAST_CORIOLIS)
    flow_n, flow_t = vector_to_frame(xp, axes, inputs["x_velocity"], inputs["y_velocity"])
    grown_n, grown_t = vector_to_frame(
        xp, axes, inputs["eddy_energy_gradient_x"], inputs["eddy_energy_gradient_y"]
    )
    growth = inputs["eady_growth_rate"]
    return {
        "eddy_speed_share": _bounded(xp, speed / column),
        "flow_across_eddy_ratio": _bounded(xp, flow_n / speed),
        "flow_along_eddy_ratio": _bounded(xp, flow_t / speed),
        "eddy_energy_gradient_across": _bounded(xp, grown_n * radius),
        "eddy_energy_gradient_along": _bounded(xp, grown_t * radius),
        "rhines_length_ratio": rhines_length(xp, inputs) / radius,
        "eddy_rossby_number": _bounded(xp, column / (coriolis * radius)),
        "eady_growth_ratio": _bounded(xp, growth * radius / column),
    }


def point_features(xp: Any, inputs: Mapping[str, Any], energy: bool) -> dict[str, Any]:
    """Compute the features of a closure.

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    inputs : mapping of str to array
        Rows of ``quantities.INPUTS`` in SI units.
    energy : bool
        Whether the closure is given eddy energy. If so, features that need it take the
        place of dimensional amplitudes.

    Returns
    -------
    dict of str to array
        Named as the rows of ``quantities.FEATURES``, in their order.
    """
    axes = frame_axes(xp, inputs)
    fields = _shared(xp, axes, inputs)
    fields |= _energy(xp, axes, inputs) if energy else _amplitudes(xp, inputs)
    return {name: fields[name] for name in FEATURES if name in fields}


def feature_table() -> list[Quantity]:
    """Return the rows of all features, in order."""
    return list(FEATURES.values())
