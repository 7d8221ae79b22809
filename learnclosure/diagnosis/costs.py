"""What a diagnosis will cost: memory, passes, bytes, size of the artefacts, time.

Sizes of artefacts come from a diagnosis of a few cells, which has every variable the real
one will; times from reading and working on a few times; memory from a list of the
arrays that are held together.
"""

from __future__ import annotations

import math
import time
from dataclasses import dataclass

import xarray as xr

from learnclosure.diagnosis.budget import SMOOTHING_FACTORS
from learnclosure.diagnosis.ceilings import fits_needed
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.eddies import BAND_BYTES
from learnclosure.diagnosis.estimate import LEAST_MEMBERS_FOR_JACKKNIFE, Estimator
from learnclosure.diagnosis.moment_layout import group_sizes
from learnclosure.diagnosis.moments import TIME_BLOCKS, EnsembleSource, Moments
from learnclosure.diagnosis.probe import Probe, Sample
from learnclosure.ensemble.sources import LEAST_MEMBERS_FOR_HALVES
from learnclosure.features.artefact import features_dataset
from learnclosure.study import DiagnosisSettings

PROGRAM_BYTES = 290e6
"""Python with all libraries loaded and files open (measured)."""
FACTOR_BYTES = 2.5e3
"""Sparse factors of one layer, bytes a cell (measured between 4e3 and 2e4 cells)."""
OVERHEAD_BYTES = 1.3e3
"""Bytes of a variable's own header and attributes in a file (measured)."""
CROWDED_BYTES = 4.1e3
"""The same where there are more attributes than HDF5 keeps in the header (measured)."""
CROWDED_ATTRIBUTES = 6
"""Attributes of our own from which, with the library's, there are too many for the header."""
CHECKSUM_RATE = 1.0e9
"""Bytes a second that are read and hashed (measured)."""
PASSES = 1
CHECKSUM_PASSES = 1


@dataclass(frozen=True)
class Costs:
    """Costs of diagnosing one ensemble.

    Attributes
    ----------
    passes, checksum_passes : int
        How often each field is read and decoded, and each file read for its checksum.
    bytes_read : float
        By all of these.
    memory : float
        Largest resident size of the process, bytes.
    artefacts : dict of str to float
        Bytes by file; empty where the tracers determine no tensor.
    seconds : float
        On this machine, one region in one process.
    """

    passes: int
    checksum_passes: int
    bytes_read: float
    memory: float
    artefacts: dict[str, float]
    seconds: float


def inversions_needed(members: int, times: int, tracers: int, withheld: int, draws: int) -> int:
    """Count the smooth inversions of one diagnosis.

    Parameters
    ----------
    members, times, tracers, withheld, draws : int
        Of the ensemble, and pairs of halves for each point of the ceilings.

    Returns
    -------
    int
    """
    # The tensor in both its forms, and once more for what smoothing takes from it.
    count = 3
    if members >= LEAST_MEMBERS_FOR_JACKKNIFE:
        count += members
    if withheld:
        count += sum(factor != 1.0 for factor in SMOOTHING_FACTORS)
    elif tracers > 2:
        count += 2 * tracers
    if members >= LEAST_MEMBERS_FOR_HALVES:
        # Both halves, and what noise in the gradients takes from the tensor.
        count += 3
        if draws:
            count += fits_needed(members, min(TIME_BLOCKS, times), draws)
    return count


def _size(dataset: xr.Dataset, full: dict[str, int]) -> float:
    """Size of a file with the variables of a small dataset on larger dimensions."""
    crowded = [len(v.attrs) >= CROWDED_ATTRIBUTES for v in dataset.variables.values()]
    headers = sum(CROWDED_BYTES if many else OVERHEAD_BYTES for many in crowded)
    return headers + sum(
        float(variable.dtype.itemsize)
        * math.prod(full.get(str(dim), size) for dim, size in variable.sizes.items())
        for variable in dataset.variables.values()
    )


def artefact_sizes(
    sample: Sample, coarsening: Coarsening, settings: DiagnosisSettings
) -> dict[str, float]:
    """Predict the bytes of ``statistics.nc`` and ``features.nc``.

    Parameters
    ----------
    sample : Sample
        A few cells and times.
    coarsening : Coarsening
        Of the whole grid.
    settings : DiagnosisSettings

    Returns
    -------
    dict of str to float

    Raises
    ------
    DiagnosisError
        If the tracers determine no tensor there.
    """
    quick = settings.model_copy(update={"ceiling_draws": min(settings.ceiling_draws, 1)})
    _, rows, columns = coarsening.geometry.mask.shape
    full = {"y": rows, "x": columns}
    statistics = diagnose(sample, quick)
    return {
        "statistics.nc": _size(statistics, full),
        "features.nc": _size(features_dataset(statistics), full),
    }


def predicted_memory(
    ensemble: EnsembleSource, coarsening: Coarsening, stored_bytes: float
) -> float:
    """Predict the largest resident size of a diagnosis.

    Parameters
    ----------
    ensemble : EnsembleSource
    coarsening : Coarsening
    stored_bytes : float
        Of all fields and times, in the precision of the files.

    Returns
    -------
    float
        Bytes.
    """
    members, times = len(ensemble.member_labels), len(ensemble.times)
    layers, rows, columns = ensemble.grid.shape
    tracers = len(ensemble.tracers) + len(ensemble.withheld_tracers)
    coarse = coarsening.geometry.mask
    at_once = min(times, int(getattr(ensemble, "times_read_at_once", 1)))
    one_time = 8.0 * members * layers * rows * columns * (2 + tracers + ensemble.has_buoyancy)
    scalars = tracers + len(ensemble.active)
    groups = len(group_sizes(members))
    parts = 1 + 2 * min(TIME_BLOCKS, times)
    sums = 8.0 * coarse.size * (parts * (8 + 3 * scalars) + groups * (2 + 5 * scalars))
    tensors = 8.0 * groups * coarse.size * 8
    factors = FACTOR_BYTES * float(coarse.sum(axis=(1, 2)).max())
    return (
        PROGRAM_BYTES
        + stored_bytes * at_once / times
        # Read and stacked, beside the sums of a chunk and of all; or these, and what of them.
        + max(2.0 * min(one_time, BAND_BYTES) + 2.0 * sums, 2.0 * sums + tensors + factors)
    )


def predict_costs(
    ensemble: EnsembleSource,
    coarsening: Coarsening,
    settings: DiagnosisSettings,
    probe: Probe,
    moments: Moments,
    estimator: Estimator,
    working_seconds: float,
) -> Costs:
    """Predict all costs but the sizes of artefacts from what a probe took.

    Parameters
    ----------
    ensemble : EnsembleSource
    coarsening : Coarsening
        Of the whole grid.
    settings : DiagnosisSettings
    probe : Probe
        After its times have been read.
    moments : Moments
        Of the probe.
    estimator : Estimator
        Of the probe's window, with the settings of the study.
    working_seconds : float
        That accumulating the probe's moments took beside reading.

    Returns
    -------
    Costs
        Without sizes of artefacts.
    """
    members, times = len(ensemble.member_labels), len(ensemble.times)
    stored = float(
        getattr(ensemble, "stored_bytes", sum(f.nbytes for f in probe.first.values()) * times)
    )
    start = time.perf_counter()
    estimator.group(moments.whole)
    fit_seconds = time.perf_counter() - start
    at_once = int(getattr(ensemble, "times_read_at_once", 1))
    read = min(times, math.ceil(len(probe.times) / at_once) * at_once)
    share = ensemble.grid.geometry.mask.size / probe.grid.geometry.mask.size
    more = members / len(probe.member_labels)
    sea = coarsening.geometry.mask.sum() / max(int(probe.coarsening.geometry.mask.sum()), 1)
    fits = inversions_needed(
        members, times, len(ensemble.tracers), len(ensemble.withheld_tracers),
        settings.ceiling_draws,
    )  # fmt: skip
    seconds = (
        sum(probe.reading) * times / read
        + working_seconds * share * more * times / len(probe.times)
        + fit_seconds * sea * fits
        + stored / CHECKSUM_RATE
    )
    return Costs(
        passes=PASSES,
        checksum_passes=CHECKSUM_PASSES,
        bytes_read=stored * (PASSES + CHECKSUM_PASSES),
        memory=predicted_memory(ensemble, coarsening, stored),
        artefacts={},
        seconds=float(seconds),
    )
