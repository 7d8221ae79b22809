"""The local frame tensors and vectors are learned in, and the way there and back.

The first axis n points up the potential vorticity gradient in the sense of planetary
rotation (along ``sign(f) grad q``), the second is ``t = sign(f) zhat x n``. The handedness
of the frame follows the hemisphere, so that a southern flow looks like its northern
mirror image and pseudo-scalars change sign by themselves.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any, NamedTuple

LEAST_GRADIENT = 1e-18
"""Potential vorticity gradients below this, m-1 s-1, give no direction."""


class Axes(NamedTuple):
    """Unit vectors of the local frame in model components, and where they mean anything.

    Attributes
    ----------
    nx, ny : array, 1
        First axis.
    tx, ty : array, 1
        Second axis.
    defined : array, 1
        1 where the potential vorticity gradient has a direction; elsewhere 0 and n
        points along y.
    """

    nx: Any
    ny: Any
    tx: Any
    ty: Any
    defined: Any


def frame_axes(xp: Any, inputs: Mapping[str, Any]) -> Axes:
    """Compute the local frame.

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    inputs : mapping of str to array
        With ``pv_gradient_x``, ``pv_gradient_y`` in m-1 s-1, ``coriolis_parameter`` in s-1.

    Returns
    -------
    Axes
    """
    along_x, along_y = inputs["pv_gradient_x"], inputs["pv_gradient_y"]
    hemisphere = xp.where(inputs["coriolis_parameter"] < 0.0, -1.0, 1.0)
    # Scaling first keeps the squares of such small numbers from underflowing.
    largest = xp.maximum(xp.abs(along_x), xp.abs(along_y))
    safe = xp.maximum(largest, LEAST_GRADIENT)
    scaled_x, scaled_y = along_x / safe, along_y / safe
    length = xp.sqrt(xp.maximum(scaled_x * scaled_x + scaled_y * scaled_y, 1e-30))
    there = largest > LEAST_GRADIENT
    nx = xp.where(there, hemisphere * scaled_x / length, 0.0)
    ny = xp.where(there, hemisphere * scaled_y / length, hemisphere)
    return Axes(nx, ny, -(hemisphere * ny), hemisphere * nx, xp.where(there, 1.0, 0.0))


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
