"""Turning and mirroring point inputs and tensors, as a change of model axes would."""

from __future__ import annotations

import math
from collections.abc import Mapping

import numpy as np
import numpy.typing as npt

from learnclosure.quantities import INPUTS, Quantity

FloatArray = npt.NDArray[np.float64]
Matrix = tuple[tuple[float, float], tuple[float, float]]


def rotation(angle: float) -> Matrix:
    """Matrix that gives components on axes from which a vector appears turned by ``angle``.

    Parameters
    ----------
    angle : float, rad
        Counter-clockwise.

    Returns
    -------
    tuple of tuple of float
    """
    return (
        (math.cos(angle), -math.sin(angle)),
        (math.sin(angle), math.cos(angle)),
    )


REFLECTION: Matrix = ((1.0, 0.0), (0.0, -1.0))
"""Reverses the y axis; with the sign of the Coriolis parameter, the other hemisphere."""


def _determinant(matrix: Matrix) -> float:
    return matrix[0][0] * matrix[1][1] - matrix[0][1] * matrix[1][0]


def _partner(name: str) -> str | None:
    """Name of the y component if this is the x component of a vector."""
    if name.startswith("x_"):
        return "y_" + name.removeprefix("x_")
    return name.removesuffix("_x") + "_y" if name.endswith("_x") else None


def transform_inputs(
    inputs: Mapping[str, FloatArray],
    matrix: Matrix,
    table: Mapping[str, Quantity] = INPUTS,
) -> dict[str, FloatArray]:
    """Express point inputs on other axes, each by the parity its row declares.

    Parameters
    ----------
    inputs : mapping of str to ndarray, shape (point,)
        Vectors begin with ``x_`` or end in ``_x`` and so on, tensors end in ``_xx``,
        ``_xy``, ``_yx``, ``_yy``.
    matrix : tuple of tuple of float
        Orthogonal; a reflection also changes the sign of pseudo-scalars and once more
        that of pseudo-vectors.
    table : mapping of str to Quantity, optional
        Rows that declare the parities.

    Returns
    -------
    dict of str to ndarray

    Examples
    --------
    >>> import numpy as np
    >>> still = {"coriolis_parameter": np.array([1e-4])}
    >>> rows = {"coriolis_parameter": Quantity("coriolis_parameter", "f", "s-1", "f", "input",
    ...                                        parity="pseudo-scalar")}
    >>> transform_inputs(still, REFLECTION, rows)["coriolis_parameter"]
    array([-0.0001])
    """
    handed = _determinant(matrix)
    turned: dict[str, FloatArray] = {}
    for name, values in inputs.items():
        parity = table[name].parity
        if parity == "scalar":
            turned[name] = values
        elif parity == "pseudo-scalar":
            turned[name] = handed * values
        elif parity in ("vector", "pseudo-vector"):
            other = _partner(name)
            if other is None:
                continue
            sign = handed if parity == "pseudo-vector" else 1.0
            along_x, along_y = values, inputs[other]
            turned[name] = sign * (matrix[0][0] * along_x + matrix[0][1] * along_y)
            turned[other] = sign * (matrix[1][0] * along_x + matrix[1][1] * along_y)
        else:
            if not name.endswith("_xx"):
                continue
            stem = name.removesuffix("_xx")
            parts = [inputs[f"{stem}_{pair}"] for pair in ("xx", "xy", "yx", "yy")]
            tensor = transform_tensor(np.stack(parts, axis=-1), matrix)
            for number, pair in enumerate(("xx", "xy", "yx", "yy")):
                turned[f"{stem}_{pair}"] = tensor[..., number]
    return {name: turned[name] for name in inputs}


def transform_tensor(tensor: FloatArray, matrix: Matrix) -> FloatArray:
    """Express second-order tensors on other axes, ``R K R^T``.

    Parameters
    ----------
    tensor : ndarray, shape (..., 4)
        Components xx, xy, yx, yy.
    matrix : tuple of tuple of float
        Orthogonal matrix R.

    Returns
    -------
    ndarray, shape (..., 4)
    """
    turn = np.asarray(matrix)
    square = tensor.reshape(*tensor.shape[:-1], 2, 2)
    return np.asarray(turn @ square @ turn.T, dtype=np.float64).reshape(tensor.shape)
