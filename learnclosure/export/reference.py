"""Reference points of a bundle: inputs, and what the closure makes of them."""

from __future__ import annotations

import io
from collections.abc import Mapping, Sequence
from typing import Any

import h5netcdf
import h5py
import numpy as np
import numpy.typing as npt

from learnclosure.quantities import INPUTS, OUTPUTS, Quantity

FloatArray = npt.NDArray[np.float64]

AGREEMENT_LIMIT = 1e-12
"""Largest difference between two evaluations, over the spread of the output.

One limit serves every kind of regressor, since all arithmetic of a graph is double; only
comparisons in forests see rounded features, and those agree to the last bit.
"""
LEAST_SPREAD_SHARE = 1e-6
"""Spread of an output that hardly varies, as a share of its largest magnitude."""
SINGLE_LIMIT = 1e-4
"""The same for a variant whose regressor computes in single precision."""
LARGEST_POINTS = 200_000
VARIED_POINTS = 8


def with_tails(inputs: Mapping[str, FloatArray]) -> dict[str, FloatArray]:
    """Add points far outside and at the edges of what a closure was trained on.

    Parameters
    ----------
    inputs : mapping of str to ndarray, shape (point,)
        Points of the regions, in SI units.

    Returns
    -------
    dict of str to ndarray, shape (more points,)
        The points given; then variants of some of them: every value times ten, a
        thousand and a millionth, all signs turned (the other hemisphere), no potential
        vorticity gradient, no rotation, no eddy energy; and one point of zeros but for the
        deformation radius, which by its definition has none.
    """
    count = len(next(iter(inputs.values())))
    chosen = np.unique(np.linspace(0, count - 1, min(count, VARIED_POINTS)).astype(np.int64))

    def without(word: str) -> dict[str, FloatArray]:
        return {
            name: values[chosen] * (0.0 if word in name else 1.0) for name, values in inputs.items()
        }

    def times(factor: float) -> dict[str, FloatArray]:
        return {name: values[chosen] * factor for name, values in inputs.items()}

    variants = [
        dict(inputs),
        *(times(factor) for factor in (10.0, 1e3, 1e-6)),
        {
            name: values[chosen] * (1.0 if INPUTS[name].parity == "scalar" else -1.0)
            for name, values in inputs.items()
        },
        *(without(word) for word in ("pv_gradient", "coriolis_parameter", "energy")),
        {
            name: values[:1] * (1.0 if name == "deformation_radius" else 0.0)
            for name, values in inputs.items()
        },
    ]
    # Adding zero makes negative zeros positive, which a file need not keep apart.
    return {name: np.concatenate([part[name] for part in variants]) + 0.0 for name in inputs}


def largest_difference(
    found: Mapping[str, FloatArray], expected: Mapping[str, FloatArray]
) -> tuple[float, str]:
    """Return the largest difference between two evaluations over each output's spread.

    Parameters
    ----------
    found, expected : mapping of str to ndarray, shape (point,)

    Returns
    -------
    difference : float
        Infinite where a value is not finite or shapes differ.
    output : str
        Where it was met.
    """
    worst, place = 0.0, next(iter(expected))
    for name, truth in expected.items():
        values = found[name]
        finite = bool(np.isfinite(values).all() and np.isfinite(truth).all())
        if values.shape != truth.shape or not truth.size or not finite:
            return float("inf"), name
        largest = float(np.max(np.abs(truth)))
        # Dividing first keeps the squares of half-widths that stand for infinity in range.
        spread = float(np.std(truth / largest)) * largest if largest > 0.0 else 1.0
        spread = max(spread, LEAST_SPREAD_SHARE * largest)
        difference = float(np.max(np.abs(values - truth))) / spread
        if difference > worst:
            worst, place = difference, name
    return worst, place


def reference_file(
    inputs: Mapping[str, FloatArray],
    outputs: Mapping[str, FloatArray],
    attributes: Mapping[str, str],
) -> bytes:
    """Return the contents of ``reference.nc``.

    Parameters
    ----------
    inputs, outputs : mapping of str to ndarray, shape (point,)
        Named as in ``quantities.INPUTS`` and ``quantities.OUTPUTS``.
    attributes : mapping of str to str
        Global attributes beside the conventions.

    Returns
    -------
    bytes
        A CF NetCDF-4 file; the same values give the same bytes.
    """
    stream = io.BytesIO()
    with h5netcdf.File(stream, "w") as file:
        file.attrs["Conventions"] = "CF-1.11"
        for key, text in attributes.items():
            file.attrs[key] = text
        file.dimensions = {"point": len(next(iter(inputs.values())))}
        for part, table, columns in (("input", INPUTS, inputs), ("output", OUTPUTS, outputs)):
            for name, values in columns.items():
                _write_column(file, table[name], values, part)
    return stream.getvalue()


def _write_column(file: Any, quantity: Quantity, values: FloatArray, part: str) -> None:
    variable = file.create_variable(quantity.name, ("point",), dtype="f8", data=values)
    for key, text in quantity.attributes().items():
        variable.attrs[key] = text
    variable.attrs["closure_role"] = part


def read_reference(
    content: bytes, inputs: Sequence[str], outputs: Sequence[str]
) -> tuple[dict[str, FloatArray], dict[str, FloatArray]]:
    """Read reference points.

    Parameters
    ----------
    content : bytes
        Contents of ``reference.nc``.
    inputs, outputs : sequence of str
        Variables wanted.

    Returns
    -------
    inputs, outputs : dict of str to ndarray, shape (point,)

    Raises
    ------
    ValueError
        If a variable is missing, is not double, has other dimensions than ``point``, is
        too long or lies outside the file.
    OSError
        If the contents are not a NetCDF-4 file.
    """
    _require_plain(content, [*inputs, *outputs])
    with h5netcdf.File(io.BytesIO(content), "r") as file:

        def column(name: str) -> FloatArray:
            variable = file.variables[name]
            if variable.dimensions != ("point",):
                raise ValueError(f"{name} is not a double on (point)")
            return np.asarray(variable[...], dtype=np.float64)

        return {name: column(name) for name in inputs}, {name: column(name) for name in outputs}


def _require_plain(content: bytes, names: Sequence[str]) -> None:
    """Insist on bounded variables whose values lie in the file itself."""
    with h5py.File(io.BytesIO(content), "r") as file:
        for name in names:
            if not isinstance(file.get(name, getlink=True), (h5py.HardLink, type(None))):
                raise ValueError(f"{name} is a link")
            variable = file.get(name)
            if variable is None:
                raise ValueError(f"no variable {name}")
            if not isinstance(variable, h5py.Dataset) or variable.dtype != np.float64:
                raise ValueError(f"{name} is not a double on (point)")
            if variable.external is not None or variable.is_virtual:
                raise ValueError(f"{name} lies outside the file")
            if variable.size is None or variable.size > LARGEST_POINTS:
                raise ValueError(f"{name} has shape {variable.shape}")
