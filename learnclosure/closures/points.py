"""Arrays of values at points: checking what comes in, stacking what goes out."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.errors import InputError

FloatArray = npt.NDArray[np.float64]


class NotedInputs(dict[str, Any]):
    """Inputs that remember which of them were asked for.

    Attributes
    ----------
    asked : set of str
    """

    def __init__(self, values: Mapping[str, Any]) -> None:
        super().__init__(values)
        self.asked: set[str] = set()

    def __getitem__(self, name: str) -> Any:
        self.asked.add(name)
        return super().__getitem__(name)


def stacked(parts: Sequence[Any], count: int) -> FloatArray:
    """Stack values of points as columns, repeating those that are the same everywhere.

    Parameters
    ----------
    parts : sequence of array-like, shape (point,) or ()
    count : int
        Number of points.

    Returns
    -------
    ndarray, shape (point, part)
    """
    return np.column_stack([np.broadcast_to(part, count) for part in parts]).astype(np.float64)


def feature_matrix(features: Mapping[str, Any], count: int) -> FloatArray:
    """Return features as a matrix, in their own order.

    Parameters
    ----------
    features : mapping of str to array-like, shape (point,)
    count : int
        Number of points.

    Returns
    -------
    ndarray, shape (point, feature)
    """
    return stacked(list(features.values()), count)


def checked_inputs(inputs: Mapping[str, FloatArray], names: Sequence[str]) -> dict[str, FloatArray]:
    """Return the named inputs as double-precision arrays of one length.

    Parameters
    ----------
    inputs : mapping of str to array-like, shape (point,)
    names : sequence of str

    Returns
    -------
    dict of str to ndarray, shape (point,)

    Raises
    ------
    InputError
        If one is missing, has another length or holds a value that is not finite.
    """
    values: dict[str, FloatArray] = {}
    for name in names:
        if name not in inputs:
            raise InputError(
                "a closure input is missing",
                where=name,
                expected=", ".join(names),
                remedy="compute it with learnclosure.features.inputs.compute_inputs",
            )
        value = np.asarray(inputs[name], dtype=np.float64)
        length = len(next(iter(values.values()))) if values else value.size
        if value.shape != (length,):
            raise InputError(
                "a closure input has the wrong shape",
                where=name,
                found=value.shape,
                expected=(length,),
                remedy="give every input as a flat array with one value for each point",
            )
        if not np.isfinite(value).all():
            raise InputError(
                "a closure input holds values that are not finite",
                where=name,
                found=f"{int(np.sum(~np.isfinite(value)))} of {length}",
                remedy="leave out land and other points without a mean state",
            )
        values[name] = value
    return values
