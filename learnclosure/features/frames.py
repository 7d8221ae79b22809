"""The local frame tensors and vectors are learned in, and the way there and back.

The second axis is ``t = sign(f) zhat x n``. The handedness of the frame follows the
hemisphere, so that a southern flow looks like its northern mirror image and
pseudo-scalars change sign by themselves. The first axis n points

- ``pv-gradient``: up the potential vorticity gradient, along ``sign(f) grad q``;
- ``flow``: to the left of the mean flow, to the right of it in the south;
- ``jet``: to the left of the flow on the nearest jet axis, to the right in the south;
- ``fixed``: poleward, along ``sign(f) grad f``.

In an eastward jet all four agree. Where there is no flow or no jet, the frames that follow
them fall back to that of ``pv-gradient``. Where that has no direction, or ``fixed`` none,
the frame has no meaning and n points along y: only an isotropic tensor can stand there.
Each of these directions turns with the model axes, so what is learned does not depend on
them.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, Literal, NamedTuple

Frame = Literal["pv-gradient", "flow", "jet", "fixed"]

LEAST_GRADIENT = 1e-18
"""Potential vorticity gradients and beta below this, m-1 s-1, give no direction."""
LEAST_FLOW = 1e-9
"""Flow slower than this, m s-1, gives no direction."""
LEAST_AXIS = 1e-6
"""A shorter vector along a jet axis, of length one where there is a jet, gives none."""


class Axes(NamedTuple):
    """Unit vectors of the local frame in model components, and where they mean anything.

    Attributes
    ----------
    nx, ny : array, 1
        First axis.
    tx, ty : array, 1
        Second axis.
    defined : array, 1
        1 where there is a direction; elsewhere 0 and n points along y.
    own : array, 1
        1 where the direction is the frame's own and no fallback.
    """

    nx: Any
    ny: Any
    tx: Any
    ty: Any
    defined: Any
    own: Any


def _direction(xp: Any, along_x: Any, along_y: Any, least: float) -> tuple[Any, Any, Any]:
    """Return the unit vector along a vector, and the comparison that tells where there is one."""
    # Scaling first keeps the squares of such small numbers from underflowing.
    largest = xp.maximum(xp.abs(along_x), xp.abs(along_y))
    safe = xp.maximum(largest, least)
    scaled_x, scaled_y = along_x / safe, along_y / safe
    length = xp.sqrt(xp.maximum(scaled_x * scaled_x + scaled_y * scaled_y, 1e-30))
    return scaled_x / length, scaled_y / length, largest > least


def _candidates(
    xp: Any, inputs: Mapping[str, Any], hemisphere: Any, frame: Frame
) -> list[tuple[Any, Any, Any]]:
    """First axes to try in order, each with where it exists."""

    def up(name: str) -> tuple[Any, Any, Any]:
        x, y, there = _direction(xp, inputs[f"{name}_x"], inputs[f"{name}_y"], LEAST_GRADIENT)
        return hemisphere * x, hemisphere * y, there

    def left_of(x: Any, y: Any, least: float) -> tuple[Any, Any, Any]:
        x, y, there = _direction(xp, x, y, least)
        return -(hemisphere * y), hemisphere * x, there

    if frame == "fixed":
        return [up("planetary_beta")]
    if frame == "flow":
        flow = left_of(inputs["x_velocity"], inputs["y_velocity"], LEAST_FLOW)
        return [flow, up("pv_gradient")]
    if frame == "jet":
        axis = left_of(inputs["axis_direction_x"], inputs["axis_direction_y"], LEAST_AXIS)
        return [axis, up("pv_gradient")]
    return [up("pv_gradient")]


def frame_axes(xp: Any, inputs: Mapping[str, Any], frame: Frame = "pv-gradient") -> Axes:
    """Compute the local frame.

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    inputs : mapping of str to array
        With ``coriolis_parameter`` in s-1 and ``pv_gradient_x``, ``pv_gradient_y`` in
        m-1 s-1, or ``planetary_beta_x``, ``planetary_beta_y`` for ``fixed``; for ``flow``
        also the velocity in m s-1, for ``jet`` the unit vector ``axis_direction_x``,
        ``axis_direction_y``.
    frame : {"pv-gradient", "flow", "jet", "fixed"}, optional
        What the first axis follows.

    Returns
    -------
    Axes
    """
    hemisphere = xp.where(inputs["coriolis_parameter"] < 0.0, -1.0, 1.0)
    nx, ny, defined = hemisphere * 0.0, hemisphere, hemisphere * 0.0
    own = defined
    for x, y, there in reversed(_candidates(xp, inputs, hemisphere, frame)):
        own = xp.where(there, 1.0, 0.0)
        nx = xp.where(there, x, nx)
        ny = xp.where(there, y, ny)
        defined = xp.where(there, 1.0, defined)
    return Axes(nx, ny, -(hemisphere * ny), hemisphere * nx, defined, own)


def vector_to_frame(xp: Any, axes: Axes, x: Any, y: Any) -> tuple[Any, Any]:  # noqa: ARG001
    """Components of a vector in the local frame.

    Parameters
    ----------
    xp : namespace
    axes : Axes
    x, y : array
        Model components.

    Returns
    -------
    n, t : array
    """
    return axes.nx * x + axes.ny * y, axes.tx * x + axes.ty * y


def tensor_to_frame(
    xp: Any, axes: Axes, xx: Any, xy: Any, yx: Any, yy: Any
) -> tuple[Any, Any, Any, Any]:
    """Components of a tensor in the local frame, ``R^T K R`` with ``R = [n t]``.

    Parameters
    ----------
    xp : namespace
    axes : Axes
    xx, xy, yx, yy : array
        Model components.

    Returns
    -------
    nn, nt, tn, tt : array
    """
    x_n, x_t = vector_to_frame(xp, axes, xx, xy)
    y_n, y_t = vector_to_frame(xp, axes, yx, yy)
    nn, tn = vector_to_frame(xp, axes, x_n, y_n)
    nt, tt = vector_to_frame(xp, axes, x_t, y_t)
    return nn, nt, tn, tt


def tensor_to_model(
    xp: Any,  # noqa: ARG001
    axes: Axes,
    nn: Any,
    nt: Any,
    tn: Any,
    tt: Any,
) -> tuple[Any, Any, Any, Any]:
    """Components of a tensor on model axes, ``R K R^T``.

    Parameters
    ----------
    xp : namespace
    axes : Axes
    nn, nt, tn, tt : array
        Components in the local frame.

    Returns
    -------
    xx, xy, yx, yy : array
    """
    n_x, n_y = nn * axes.nx + nt * axes.tx, nn * axes.ny + nt * axes.ty
    t_x, t_y = tn * axes.nx + tt * axes.tx, tn * axes.ny + tt * axes.ty
    return (
        axes.nx * n_x + axes.tx * t_x,
        axes.nx * n_y + axes.tx * t_y,
        axes.ny * n_x + axes.ty * t_x,
        axes.ny * n_y + axes.ty * t_y,
    )
