"""Ceiling curves in ``statistics.nc``: written with names and units, and read again."""

from __future__ import annotations

import numpy as np
import xarray as xr

from learnclosure.diagnosis.artefact import StatisticsBuilder
from learnclosure.diagnosis.ceilings import Ceilings
from learnclosure.diagnosis.reliability import CeilingCurve

SOURCE = "Spearman 1910 and Brown 1910, British Journal of Psychology 3"
AXES = {
    "members": ("count", "ceiling_", "members", 1.0),
    "snapshots": ("snapshot_count", "ceiling_snapshots_", "snapshots", 0.0),
}
"""Dimension, beginning of names, what is counted and where its noise would be infinite."""


def _in_words(quantity: str) -> str:
    if quantity == "flux":
        return "eddy fluxes, mean over tracers and components"
    kind, _, pair = quantity.rpartition("_tensor_")
    how = "transport tensor" if kind == "transport" else "tensor by plain least squares"
    return f"{pair} component of the {how}"


def add_ceilings(builder: StatisticsBuilder, ceilings: Ceilings) -> None:
    """Add all curves to a builder.

    Parameters
    ----------
    builder : StatisticsBuilder
    ceilings : Ceilings
    """
    for axis, (dimension, prefix, counted, _) in AXES.items():
        curves: dict[str, CeilingCurve] = getattr(ceilings, axis)
        first = next(iter(curves.values()))
        builder.coordinates[dimension] = xr.Variable(
            (dimension,),
            first.counts.astype(np.int32),
            {"long_name": f"number of {counted}", "units": "1"},
        )
        builder.add(
            f"{prefix}measured", (np.arange(len(first.counts)) < first.measured).astype(np.int8),
            (dimension,),
            f"1 where reliability with so many {counted} was measured, 0 where extrapolated", "1",
        )  # fmt: skip
        for name, curve in curves.items():
            about = f"reliability of the {_in_words(name)}, against {counted}"
            dims = (dimension, "layer")
            builder.add(prefix + name, curve.reliability, dims, about, "1", references=SOURCE)
            builder.add(
                f"{prefix}{name}_standard_error", curve.standard_error, dims,
                f"bootstrap standard error, over members, of the {about}", "1",
                references="Efron 1979, Annals of Statistics 7, 1-26",
            )  # fmt: skip


def read_ceilings(statistics: xr.Dataset) -> Ceilings | None:
    """Read all curves from the statistics of a region.

    Parameters
    ----------
    statistics : xarray.Dataset

    Returns
    -------
    Ceilings or None
        None if there are none.
    """
    if "ceiling_measured" not in statistics:
        return None
    found: dict[str, dict[str, CeilingCurve]] = {}
    for axis, (dimension, prefix, _, offset) in AXES.items():
        errors = [
            str(name)
            for name, variable in statistics.data_vars.items()
            if str(name).startswith(prefix) and variable.dims == (dimension, "layer")
            if str(name).endswith("_standard_error")
        ]
        found[axis] = {
            error.removeprefix(prefix).removesuffix("_standard_error"): CeilingCurve(
                np.asarray(statistics[dimension].values, dtype=np.int64),
                np.asarray(statistics[error.removesuffix("_standard_error")].values, float),
                np.asarray(statistics[error].values, float),
                int(statistics[f"{prefix}measured"].values.sum()),
                offset,
            )
            for error in errors
        }
    return Ceilings(found["members"], found["snapshots"])
