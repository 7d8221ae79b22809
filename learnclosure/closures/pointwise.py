"""The part of a closure behind its regressor, written once for NumPy and the graph."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any, NamedTuple

import numpy as np
import numpy.typing as npt

from learnclosure.features.frames import tensor_to_model

FloatArray = npt.NDArray[np.float64]

UNBOUNDED = 1e30
"""Half-width in m2 s-1 that stands for none known; finite, so that zero times it is zero."""


class Prepared(NamedTuple):
    """What is known of each point before the regressor is asked.

    Attributes
    ----------
    features : dict of str to array
        Features in the order the regressor takes them.
    axes : Axes
        Local frame.
    scale : array, m2 s-1
        What the tensor is divided by in training.
    """

    features: dict[str, Any]
    axes: Any
    scale: Any


class Outputs(NamedTuple):
    """What a closure gives at each point, on model axes.

    Attributes
    ----------
    tensor : tuple of four arrays, m2 s-1
        Components xx, xy, yx, yy.
    half_width : tuple of four arrays, m2 s-1
        Half-width of each component.
    trust : array, 1
    """

    tensor: tuple[Any, Any, Any, Any]
    half_width: tuple[Any, Any, Any, Any]
    trust: Any


def blended(
    trust: Any, learned: tuple[Any, Any, Any, Any], fallback: Any
) -> tuple[Any, Any, Any, Any]:
    """Blend the learned tensor into an isotropic fallback as trust falls.

    Parameters
    ----------
    trust : array, 1
    learned : tuple of four arrays, m2 s-1
        Symmetric components nn, tt, nt and the antisymmetric part, within bounds.
    fallback : array, m2 s-1
        Diffusivity of the fallback, within the same bounds.

    Returns
    -------
    nn, nt, tn, tt : array, m2 s-1
        Components in the local frame. Both tensors lie in a convex set (eigenvalues
        within bounds), so the blend does too.
    """
    nn, tt, nt, alpha = learned
    rest = (1.0 - trust) * fallback
    symmetric = trust * nt
    antisymmetric = trust * alpha
    return (
        trust * nn + rest,
        symmetric - antisymmetric,
        symmetric + antisymmetric,
        trust * tt + rest,
    )


def half_widths_on_axes(
    xp: Any,
    axes: Any,
    frame: tuple[Any, Any, Any, Any],
    multipliers: FloatArray | None,
    floor: float,
) -> tuple[Any, Any, Any, Any]:
    """Carry half-widths from the local frame to model axes by interval arithmetic.

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    axes : Axes
        Local frame.
    frame : tuple of four arrays, m2 s-1
        Predicted components nn, nt, tn, tt.
    multipliers : ndarray, shape (4,), or None
        Half-widths of these over ``trace / 2 + floor``; None if not calibrated.
    floor : float, m2 s-1

    Returns
    -------
    xx, xy, yx, yy : array, m2 s-1
        ``h_ij = sum_ab |R_ia| |R_jb| h_ab``; ``UNBOUNDED`` or more where not calibrated.
    """
    local = 0.5 * (frame[0] + frame[3]) + floor
    if multipliers is None or not np.isfinite(multipliers).all():
        unknown = local * 0.0 + UNBOUNDED
        return unknown, unknown, unknown, unknown
    nn, nt, tn, tt = (local * float(value) for value in multipliers)
    x_n, y_n = xp.abs(axes.nx), xp.abs(axes.ny)
    x_t, y_t = xp.abs(axes.tx), xp.abs(axes.ty)

    def component(i_n: Any, i_t: Any, j_n: Any, j_t: Any) -> Any:
        return i_n * (j_n * nn + j_t * nt) + i_t * (j_n * tn + j_t * tt)

    return (
        component(x_n, x_t, x_n, x_t),
        component(x_n, x_t, y_n, y_t),
        component(y_n, y_t, x_n, x_t),
        component(y_n, y_t, y_n, y_t),
    )


def flagged(xp: Any, inputs: Sequence[Any], outputs: Outputs, floor: float) -> Outputs:
    """Replace outputs of points where an input or an output is not finite.

    Such points get the isotropic floor, no half-width and no trust, so that land or an
    accident of the host at one point reaches no other and is plain to see.

    Parameters
    ----------
    xp : namespace
        Array namespace: NumPy or the graph.
    inputs : sequence of array
        Every input the outputs were made from.
    outputs : Outputs
    floor : float, m2 s-1

    Returns
    -------
    Outputs
        Unchanged, to the last bit, wherever all is finite.
    """
    total: Any = 0.0
    for value in (*inputs, *outputs.tensor, *outputs.half_width, outputs.trust):
        # Zero times what is not finite is not a number, and neither is a sum with it.
        total = total + value * 0.0
    whole = total >= 0.0
    xx, xy, yx, yy = (
        xp.where(whole, value, other)
        for value, other in zip(outputs.tensor, (floor, 0.0, 0.0, floor), strict=True)
    )
    h_xx, h_xy, h_yx, h_yy = (xp.where(whole, value, UNBOUNDED) for value in outputs.half_width)
    return Outputs((xx, xy, yx, yy), (h_xx, h_xy, h_yx, h_yy), xp.where(whole, outputs.trust, 0.0))


def on_model_axes(
    xp: Any, axes: Any, frame: tuple[Any, Any, Any, Any]
) -> tuple[Any, Any, Any, Any]:
    """Rotate a tensor from the local frame to model axes.

    Parameters
    ----------
    xp : namespace
    axes : Axes
    frame : tuple of four arrays, m2 s-1
        Components nn, nt, tn, tt.

    Returns
    -------
    xx, xy, yx, yy : array, m2 s-1
    """
    xx, xy, yx, yy = tensor_to_model(xp, axes, *frame)
    return xx, xy, yx, yy
