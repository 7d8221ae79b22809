"""Parts of variables, read with as little between them and the disk as can be."""

from __future__ import annotations

from contextlib import ExitStack
from pathlib import Path
from typing import Any, NamedTuple

import h5py
import numpy as np
import numpy.typing as npt
import xarray as xr

NUMBERS_OF_FILE = ("scale_factor", "add_offset", "_Unsigned")
FILLS = ("_FillValue", "missing_value")


class Band(NamedTuple):
    """Rows of a grid with a neighbour on each side, which staggered velocities need.

    Attributes
    ----------
    pieces : tuple of slice
        Contiguous rows, joined in this order.
    below : int
        Neighbours before the first row wanted.
    wanted_count : int
        Rows wanted.
    """

    pieces: tuple[slice, ...]
    below: int
    wanted_count: int

    @property
    def wanted(self) -> slice:
        """The rows wanted among those read."""
        return slice(self.below, self.below + self.wanted_count)

    def numbers(self, more: int = 0) -> npt.NDArray[np.int64]:
        """Return the numbers of the rows read, of faces with ``more`` than the cells have."""
        parts = [np.arange(piece.start, piece.stop) for piece in self._grown(more)]
        return np.concatenate(parts)

    def _grown(self, more: int) -> tuple[slice, ...]:
        last = self.pieces[-1]
        return (*self.pieces[:-1], slice(last.start, last.stop + more))

    def of_size(self, size: int, rows: int) -> tuple[slice, ...]:
        """Return the pieces of an axis of ``size`` points on a grid of ``rows`` rows."""
        return self._grown(size - rows)


def band_of(rows: slice, count: int, *, periodic: bool) -> Band:
    """Find what to read for some rows.

    Parameters
    ----------
    rows : slice
        With start and stop; not all rows.
    count : int
        Rows of the grid.
    periodic : bool
        Whether the last row is the neighbour of the first.

    Returns
    -------
    Band

    Examples
    --------
    >>> band_of(slice(0, 4), 12, periodic=False).numbers().tolist()
    [0, 1, 2, 3, 4]
    >>> band_of(slice(8, 12), 12, periodic=True).numbers().tolist()
    [7, 8, 9, 10, 11, 0]
    """
    start, stop = max(rows.start - 1, 0), min(rows.stop + 1, count)
    pieces = [slice(start, stop)]
    below = rows.start - start
    if periodic and rows.start == 0:
        pieces.insert(0, slice(count - 1, count))
        below = 1
    if periodic and rows.stop == count:
        pieces.append(slice(0, 1))
    return Band(tuple(pieces), below, rows.stop - rows.start)


class StoredVariables:
    """Reads parts of variables; those stored plainly come straight from the HDF5 file.

    Looking a variable up through layers of metadata costs more than reading it, if fields
    are small.
    """

    def __init__(self, stack: ExitStack) -> None:
        self._stack = stack
        self._files: dict[Path, h5py.File | None] = {}

    def read(
        self, path: Path, dataset: xr.Dataset, name: str, place: dict[Any, slice]
    ) -> npt.NDArray[Any]:
        """Read part of a variable, missing values as NaN.

        Parameters
        ----------
        path : Path
            File or store of the dataset.
        dataset : xarray.Dataset
            Opened lazily.
        name : str
        place : dict of str to slice
            Part of each dimension; all of those not named.

        Returns
        -------
        ndarray
            In native byte order and the precision of the file.

        Raises
        ------
        OSError, ValueError, RuntimeError, KeyError
            If the file cannot be read.
        """
        variable = dataset.variables[name]
        if path not in self._files:
            file = h5py.File(path, "r") if h5py.is_hdf5(path) else None
            self._files[path] = None if file is None else self._stack.enter_context(file)
        file = self._files[path]
        if file is not None and _is_plain(variable):
            values = file[name][tuple(place.get(dim, slice(None)) for dim in variable.dims)]
        else:
            values = variable.isel(place).values
        return np.asarray(values, dtype=values.dtype.newbyteorder("="))


def _is_plain(variable: xr.Variable) -> bool:
    """Tell whether numbers are stored as they are meant."""
    encoding = variable.encoding
    fills = [encoding[key] for key in FILLS if key in encoding]
    return (
        variable.dtype.kind == "f"
        and np.dtype(encoding.get("dtype", variable.dtype)).kind == "f"
        and not any(key in encoding for key in NUMBERS_OF_FILE)
        and all(np.isnan(np.asarray(fill)).all() for fill in fills)
    )
