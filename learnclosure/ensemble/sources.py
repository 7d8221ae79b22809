"""Files to members: finding, opening and comparing what an ensemble consists of."""

from __future__ import annotations

import glob
import hashlib
from collections.abc import Iterator, Sequence
from contextlib import ExitStack
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from learnclosure.errors import SourceError
from learnclosure.study import EnsembleTable

LEAST_MEMBERS_FOR_HALVES = 4
"""Each half needs two members to have eddies of its own."""
MEMBER_NAMES = ("member", "realization", "ensemble", "number")
MAGIC = {b"\x89HDF": "h5netcdf", b"CDF\x01": "scipy", b"CDF\x02": "scipy"}


@dataclass(frozen=True)
class Member:
    """One member: a dataset and, if members share it, the place along their dimension.

    Attributes
    ----------
    label : int or str
    path : Path
    dataset : xarray.Dataset
        Opened lazily; times are not decoded, fill values are NaN.
    dimension : str or None
        Member dimension, if members share the dataset.
    index : int
        Place along it.
    """

    label: int | str
    path: Path
    dataset: xr.Dataset
    dimension: str | None = None
    index: int = 0

    def where(self, variable: str) -> str:
        """Return file and variable for a message."""
        return f"{self.path}: {variable}"


def first_line(error: Exception) -> str:
    """Return the first line of another library's message.

    Parameters
    ----------
    error : Exception

    Returns
    -------
    str
    """
    return next(iter(str(error).splitlines()), type(error).__name__).rstrip(".")


def _is_zarr(path: Path) -> bool:
    return path.is_dir() and any(
        (path / name).exists() for name in ("zarr.json", ".zgroup", ".zattrs", ".zmetadata")
    )


def find_files(table: EnsembleTable, folder: Path) -> list[Path]:
    """Find the files or the Zarr store of an ensemble.

    Parameters
    ----------
    table : EnsembleTable
    folder : Path
        Folder that relative patterns start from.

    Returns
    -------
    list of Path
        Sorted within each pattern.

    Raises
    ------
    SourceError
        If a pattern matches nothing or two patterns match one file.
    """
    found: list[Path] = []
    for pattern in table.patterns:
        start = Path(pattern)
        full = str(start if start.is_absolute() else folder / start)
        matches = sorted(Path(name) for name in glob.glob(full))  # noqa: PTH207
        if not matches:
            raise SourceError(
                "no file matches",
                where=f"ensemble '{table.name}': files",
                found=pattern,
                expected=f"files or a Zarr store below {folder.resolve()}",
                remedy="correct the path or the pattern",
            )
        found += matches
    if len(set(found)) != len(found):
        twice = next(path for path in found if found.count(path) > 1)
        raise SourceError(
            "two patterns match one file",
            where=f"ensemble '{table.name}': files",
            found=twice,
            remedy="name each member once",
        )
    return found


def content_digest(paths: Sequence[Path]) -> str:
    """Return one SHA-256 over names and contents of files and stores.

    Parameters
    ----------
    paths : sequence of Path

    Returns
    -------
    str
        Hexadecimal.
    """
    total = hashlib.sha256()
    for path in paths:
        parts = sorted(p for p in path.rglob("*") if p.is_file()) if path.is_dir() else [path]
        for part in parts:
            total.update(part.name.encode())
            with part.open("rb") as stream:
                total.update(hashlib.file_digest(stream, "sha256").digest())
    return total.hexdigest()


def open_dataset(path: Path, stack: ExitStack) -> xr.Dataset:
    """Open a NetCDF file or a Zarr store, lazily and without decoding times.

    Parameters
    ----------
    path : Path
    stack : ExitStack
        Closes it.

    Returns
    -------
    xarray.Dataset

    Raises
    ------
    SourceError
        If it is neither or cannot be read.
    """
    try:
        if _is_zarr(path):
            engine = "zarr"
        else:
            with path.open("rb") as stream:
                start = stream.read(4)
            engine = MAGIC.get(start, "")
        if not engine:
            raise SourceError(
                "is neither NetCDF nor a Zarr store",
                where=path,
                remedy="narrow the pattern or convert the file",
            )
        # Stores lie on a local disk: metadata gathered in one place saves nothing there.
        options: dict[str, Any] = {"consolidated": False} if engine == "zarr" else {}
        dataset = xr.open_dataset(path, engine=engine, decode_times=False, cache=False, **options)
    except (OSError, ValueError, KeyError, RuntimeError, TypeError) as error:
        raise SourceError(
            f"cannot be read as NetCDF or Zarr: {first_line(error)}",
            where=path,
            remedy="replace the file; it may be cut short or damaged",
        ) from None
    stack.callback(dataset.close)
    return dataset


def _member_dimension(dataset: xr.Dataset, named: str | None, path: Path) -> str | None:
    if named is not None:
        if named not in dataset.dims:
            raise SourceError(
                "the member dimension is missing",
                where=path,
                found=", ".join(str(dim) for dim in dataset.dims),
                expected=named,
                remedy="correct 'member' under [ensemble.grid]",
            )
        return named
    for dim in dataset.dims:
        standard = dataset[dim].attrs.get("standard_name") if dim in dataset.coords else None
        if str(dim) in MEMBER_NAMES or standard == "realization":
            return str(dim)
    return None


def _own_label(dataset: xr.Dataset, number: int | str) -> int | str:
    """Label from a scalar realization, else from the file's name or number."""
    for name, variable in dataset.variables.items():
        known = variable.attrs.get("standard_name") == "realization" or name == "realization"
        if known and variable.size == 1:
            return int(np.asarray(variable.values).ravel()[0])
    return number


def _members_of(
    path: Path, dataset: xr.Dataset, named: str | None, label: int | str
) -> Iterator[Member]:
    dimension = _member_dimension(dataset, named, path)
    if dimension is None:
        yield Member(_own_label(dataset, label), path, dataset)
        return
    labels = (
        dataset[dimension].values.tolist()
        if dimension in dataset.coords
        else list(range(dataset.sizes[dimension]))
    )
    for index, own in enumerate(labels):
        yield Member(own, path, dataset, dimension, index)


def open_members(table: EnsembleTable, folder: Path, stack: ExitStack) -> list[Member]:
    """Open all members of an ensemble, lazily.

    Parameters
    ----------
    table : EnsembleTable
    folder : Path
    stack : ExitStack
        Closes the files.

    Returns
    -------
    list of Member

    Raises
    ------
    SourceError
        If a file cannot be read, there is one member only, or two have one label.
    """
    members: list[Member] = []
    paths = find_files(table, folder)
    stems = {path.stem for path in paths}
    for number, path in enumerate(paths):
        dataset = open_dataset(path, stack)
        label = path.stem if len(stems) == len(paths) else number
        members += _members_of(path, dataset, table.grid.member, label)
    if len(members) < 2:
        raise SourceError(
            "one member is no ensemble",
            where=f"ensemble '{table.name}': {members[0].path}",
            found="one member",
            expected="at least two, one per file or along a member dimension",
            remedy="add members to 'files' or name the member dimension under [ensemble.grid]",
        )
    labels = [member.label for member in members]
    if len(set(labels)) != len(labels):
        twice = next(label for label in labels if labels.count(label) > 1)
        names = [str(member.path) for member in members if member.label == twice]
        raise SourceError(
            "two members have one label",
            where=f"ensemble '{table.name}'",
            found=f"{twice} in {' and '.join(names[:2])}",
            remedy="give each member its own realization number",
        )
    return members
