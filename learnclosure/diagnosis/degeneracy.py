"""Fields that carry no information: without variance, or copies of each other."""

from __future__ import annotations

from collections.abc import Iterator
from itertools import combinations

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.moments import EnsembleSource, Moments
from learnclosure.errors import DiagnosisError

FloatArray = npt.NDArray[np.float64]
BoolArray = npt.NDArray[np.bool_]

LEAST_VARIATION = 1e-12
"""Share of its size below which a field's variation is rounding."""


def _constant(where: str, name: str) -> DiagnosisError:
    return DiagnosisError(
        "a tracer has no variance",
        where=f"{where}: {name}",
        found="one value in all members and cells",
        expected="a tracer with a gradient",
        remedy="remove it from the tracers",
    )


def _without_eddies(where: str, name: str) -> DiagnosisError:
    return DiagnosisError(
        "a tracer is the same in all members and so has no eddies",
        where=f"{where}: {name}",
        found="a variance between members of zero",
        expected="a tracer that each member carries by itself",
        remedy="remove it from the tracers or correct the files",
    )


def _still(where: str) -> DiagnosisError:
    return DiagnosisError(
        "the velocities are the same in all members, so there are no eddies",
        where=where,
        found="a variance between members of zero",
        expected="members that differ",
        remedy="give members that were started differently",
    )


def _alike(where: str, one: str, other: str) -> DiagnosisError:
    return DiagnosisError(
        "two tracers are identical",
        where=where,
        found=f"'{one}' and '{other}'",
        expected="tracers with gradients in different directions",
        remedy="remove one of them: it determines nothing, and tests nothing if it is withheld",
    )


def _copies(where: str, one: object, other: object) -> DiagnosisError:
    return DiagnosisError(
        "two members are identical",
        where=where,
        found=f"{one} and {other}",
        expected="independent members",
        remedy="remove the copy: it would count as a member without being one",
    )


def _varies(values: FloatArray) -> bool:
    return bool(np.ptp(values) > LEAST_VARIATION * np.abs(values).max())


def _same_in_all(values: FloatArray) -> bool:
    return bool(np.array_equal(values, np.broadcast_to(values[0], values.shape)))


def find_degenerate_fields(
    fields: dict[str, FloatArray], source: EnsembleSource
) -> Iterator[DiagnosisError]:
    """Find fields of one time that carry no information.

    Parameters
    ----------
    fields : dict of str to ndarray, shape (member, layer, y, x)
        On the grid of the source.
    source : EnsembleSource

    Yields
    ------
    DiagnosisError
        One for still velocities, each tracer without variance or without eddies, each two
        identical tracers and each two identical members.
    """
    wet = source.grid.geometry.mask
    where = f"region '{source.name}'"
    names = (*source.tracers, *source.withheld_tracers)
    sea = {name: fields[name][:, wet] for name in ("x_velocity", "y_velocity", *names)}
    if not wet.any():
        return
    velocities = [fields[name][:, wet] for name in ("x_velocity", "y_velocity")]
    if all(_same_in_all(values) for values in velocities):
        yield _still(where)
    for name in names:
        if not _varies(sea[name]):
            yield _constant(where, name)
        elif _same_in_all(sea[name]):
            yield _without_eddies(where, name)
    for one, other in combinations(names, 2):
        if np.array_equal(sea[one], sea[other]):
            yield _alike(where, one, other)
    labels = source.member_labels
    for first, second in combinations(range(len(sea["x_velocity"])), 2):
        if all(np.array_equal(values[first], values[second]) for values in sea.values()):
            yield _copies(where, labels[first], labels[second])


def check_information(moments: Moments, source: EnsembleSource, wet: BoolArray) -> None:
    """Refuse moments of tracers or members that carry no information.

    Parameters
    ----------
    moments : Moments
        Of all times.
    source : EnsembleSource
    wet : ndarray of bool, shape (layer, y, x)
        Sea cells of the coarse grid.

    Raises
    ------
    DiagnosisError
        If velocities or a tracer have no variance, or two tracers are identical.
    """
    where = f"region '{source.name}'"
    names = (*source.tracers, *source.withheld_tracers)
    whole = moments.whole
    speed = float(np.sqrt(2.0 * np.abs(whole.eddy_kinetic_energy).max()))
    mean_speed = max(np.abs(whole.mean[name]).max() for name in ("x_velocity", "y_velocity"))
    if speed <= LEAST_VARIATION * float(mean_speed):
        raise _still(where)
    for name in names:
        # The mean of equal numbers may differ from them by a rounding error.
        rounding = LEAST_VARIATION * speed * float(np.abs(whole.mean[name]).max())
        if np.abs(moments.member_product[name]).max() <= rounding:
            varies = _varies(whole.mean[name][wet])
            raise _without_eddies(where, name) if varies else _constant(where, name)
    for one, other in combinations(names, 2):
        same_mean = np.array_equal(whole.mean[one], whole.mean[other])
        if same_mean and np.array_equal(whole.flux[one], whole.flux[other]):
            raise _alike(where, one, other)
