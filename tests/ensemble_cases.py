"""Small ensembles in classic NetCDF, which is written and opened at once."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import xarray as xr

from ensemble_files import member_dataset

Change = Callable[[int, xr.Dataset], xr.Dataset]


def write_classic(folder: Path, *, members: int, change: Change | None = None) -> Path:
    """Write members, each passed through ``change`` first; return the folder."""
    folder.mkdir(parents=True, exist_ok=True)
    for number in range(members):
        dataset = member_dataset(number)
        if change is not None:
            dataset = change(number, dataset)
        path = folder / f"member_{number:02d}.nc"
        dataset.to_netcdf(path, engine="scipy", format="NETCDF3_64BIT")
    return folder


def each(action: Callable[[xr.Dataset], xr.Dataset]) -> Change:
    """Change every member alike."""
    return lambda _, dataset: action(dataset)
