"""Audit of a closure: physical constraints, symmetries and behaviour on bad input.

Every check is a number beside its limit, and every check can fail.
"""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from typing import Any, NamedTuple, Protocol

import numpy as np
import numpy.typing as npt

from learnclosure.quantities import INPUTS, Quantity
from learnclosure.validation.audit_inputs import (
    AuditRegion,
    Inputs,
    degenerate_inputs,
    extreme_inputs,
    join_inputs,
    sample_inputs,
)
from learnclosure.validation.budget import smooth_tracer, stable_time_step, variance_budget
from learnclosure.validation.symmetry import (
    REFLECTION,
    Matrix,
    rotation,
    transform_inputs,
    transform_tensor,
)

FloatArray = npt.NDArray[np.float64]

ROUNDING = 1e-9
"""Relative tolerance of bounds and symmetries."""
ANGLES = (math.radians(30.0), math.radians(90.0), math.radians(151.0))
EXEMPT = 1e-3
"""Share of points a symmetry check may leave out: a tree's threshold may lie within
rounding of a value."""
TRACERS = 8


class Answer(NamedTuple):
    """What a closure says of some points, as plain arrays.

    Attributes
    ----------
    tensor, half_width : ndarray, shape (point, 4), m2 s-1
    trust : ndarray, shape (point,), 1
    """

    tensor: FloatArray
    half_width: FloatArray
    trust: FloatArray


class Predicts(Protocol):
    """Anything that predicts transport tensors from point inputs."""

    def predict(self, inputs: dict[str, FloatArray]) -> Any:
        """Return an object with ``tensor`` (point, 4), ``half_width`` and ``trust``."""


@dataclass(frozen=True)
class AuditCheck:
    """Outcome of one check.

    Attributes
    ----------
    check : str
        Name.
    value, limit : float
        What was found and what is allowed.
    passed : bool
    meaning : str
        What it means for a host, in a sentence.
    """

    check: str
    value: float
    limit: float
    passed: bool
    meaning: str

    def as_record(self) -> dict[str, Any]:
        """Return the check as plain data."""
        return asdict(self)


def eigenvalues(tensor: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Lowest and highest eigenvalue of the symmetric parts, by the library's solver.

    Parameters
    ----------
    tensor : ndarray, shape (point, 4), m2 s-1

    Returns
    -------
    lowest, highest : ndarray, shape (point,), m2 s-1
        NaN where the tensor is not finite.
    """
    square = tensor.reshape(-1, 2, 2)
    symmetric = 0.5 * (square + square.transpose(0, 2, 1))
    finite = np.isfinite(symmetric).all(axis=(1, 2))
    values = np.full((len(square), 2), np.nan)
    values[finite] = np.linalg.eigvalsh(symmetric[finite])
    return values[:, 0], values[:, 1]


def _answer(closure: Predicts, inputs: Inputs) -> Answer:
    """Ask a closure; where its regressor refuses what is not finite, nothing is known."""
    # Overflow and the like are provoked on purpose; the checks look at what comes out.
    with np.errstate(all="ignore"):
        try:
            given = closure.predict(dict(inputs))
        except ValueError:
            count = len(next(iter(inputs.values())))
            unknown = np.full((count, 4), np.nan)
            return Answer(unknown, unknown, unknown[:, 0])
    return Answer(
        np.asarray(given.tensor, dtype=np.float64),
        np.asarray(given.half_width, dtype=np.float64),
        np.asarray(given.trust, dtype=np.float64),
    )


def _bounds(tensor: FloatArray, floor: float, cap: float) -> list[AuditCheck]:
    lowest, highest = eigenvalues(tensor)
    alpha = 0.5 * np.abs(tensor[:, 2] - tensor[:, 1])
    # A NaN must fail, so every comparison is written to be false for it.
    low, high, largest = float(lowest.min()), float(highest.max()), float(alpha.max())
    return [
        AuditCheck(
            "positive semi-definite", low, floor, low >= floor * (1.0 - ROUNDING),
            "lowest eigenvalue of the symmetric part, m2 s-1, over all regions and extreme "
            "inputs; a negative one would create tracer variance",
        ),
        AuditCheck(
            "largest eigenvalue", high, cap, high <= cap * (1.0 + ROUNDING),
            "highest eigenvalue of the symmetric part, m2 s-1, over all regions and extreme inputs",
        ),
        AuditCheck(
            "antisymmetric part", largest, cap, largest <= cap * (1.0 + ROUNDING),
            "largest size of the antisymmetric part, m2 s-1, over all regions and extreme inputs",
        ),
    ]  # fmt: skip


def _deviation(
    closure: Predicts, sample: Inputs, table: Mapping[str, Quantity], matrices: Sequence[Matrix]
) -> FloatArray:
    original = _answer(closure, sample).tensor
    size = np.maximum(np.linalg.norm(original, axis=1), np.finfo(np.float64).tiny)
    moved = join_inputs([transform_inputs(sample, matrix, table) for matrix in matrices])
    answers = np.split(_answer(closure, moved).tensor, len(matrices))
    return np.stack(
        [
            np.abs(answer - transform_tensor(original, matrix)).max(axis=1) / size
            for answer, matrix in zip(answers, matrices, strict=True)
        ]
    ).ravel()


def _symmetry(name: str, deviation: FloatArray, meaning: str) -> AuditCheck:
    ordered = np.sort(np.where(np.isfinite(deviation), deviation, np.inf))
    exempt = int(EXEMPT * ordered.size)
    value = float(ordered[ordered.size - 1 - exempt])
    off = int((ordered > ROUNDING).sum())
    return AuditCheck(
        name,
        value,
        ROUNDING,
        value <= ROUNDING,
        f"{meaning}; largest relative deviation, leaving out one point in a thousand because a "
        f"tree's threshold may lie within rounding of an input; {off} of {ordered.size} points "
        "deviate",
    )


def _dissipation(fields: Sequence[tuple[AuditRegion, FloatArray]], seed: int) -> list[AuditCheck]:
    random = np.random.default_rng(seed)
    budgets = [
        variance_budget(field, region.geometry, smooth_tracer(field.shape[1:], random))
        for region, field in fields
        for _ in range(TRACERS)
    ]
    worst = float(np.max([symmetric for symmetric, _ in budgets]))
    leak = float(np.max([antisymmetric for _, antisymmetric in budgets]))
    return [
        AuditCheck(
            "variance dissipation", worst, 0.0, worst <= 0.0,
            f"change of tracer variance by the symmetric part, worst of {len(budgets)} smooth "
            "random tracers, as a share of its own size; above zero it would make variance",
        ),
        AuditCheck(
            "antisymmetric part is neutral", leak, ROUNDING, leak <= ROUNDING,
            "change of tracer variance by the antisymmetric part in finite-volume form, as a "
            "share of its own size; it must only advect",
        ),
    ]  # fmt: skip


def _stability(fields: Sequence[tuple[AuditRegion, FloatArray]], cap: float) -> AuditCheck:
    found = {region.name: stable_time_step(field, region.geometry) for region, field in fields}
    promised = min(
        0.5 / (cap * float((1.0 / region.geometry.dx**2 + 1.0 / region.geometry.dy**2).max()))
        for region, _ in fields
    )
    shortest = float(np.min(list(found.values())))
    return AuditCheck(
        "explicit time step",
        shortest,
        promised,
        shortest >= promised * (1.0 - ROUNDING),
        "longest explicit step of the diffusive part on these regions' cells, s (dt (Kxx/dx2 + "
        "Kyy/dy2) <= 1/2); the limit is what the bound on the eigenvalues promises; a host on "
        "other cells scales it with their area",
    )


def _good_behaviour(answers: Sequence[Answer]) -> list[AuditCheck]:
    trust = np.concatenate([answer.trust for answer in answers])
    outside = int((~((trust >= 0.0) & (trust <= 1.0))).sum())
    broken = sum(int((~np.isfinite(answer.tensor)).any(axis=1).sum()) for answer in answers)
    widths = np.concatenate([answer.half_width for answer in answers])
    wrong = int((~(widths >= 0.0)).any(axis=1).sum())
    return [
        AuditCheck(
            "trust between 0 and 1", float(outside), 0.0, outside == 0,
            "points whose trust lies outside its range, over regions, extreme and degenerate "
            "inputs",
        ),
        AuditCheck(
            "finite on degenerate inputs", float(broken), 0.0, broken == 0,
            "points with a component that is not a finite number: still water, neutral "
            "stratification, f = 0, no jet, each input zero in turn, extreme values",
        ),
        AuditCheck(
            "half-widths not negative", float(wrong), 0.0, wrong == 0,
            "points with a half-width that is negative or not a number",
        ),
    ]  # fmt: skip


def audit(
    closure: Predicts,
    regions: Sequence[AuditRegion],
    *,
    floor: float,
    cap: float,
    seed: int = 0,
    table: Mapping[str, Quantity] = INPUTS,
) -> list[AuditCheck]:
    """Check a closure's constraints, symmetries and behaviour on bad input.

    Parameters
    ----------
    closure : object
        With a method ``predict(inputs)``.
    regions : sequence of AuditRegion
        Training and test regions; only inputs are used, no truth.
    floor, cap : float, m2 s-1
        Promised bounds of the eigenvalues of the symmetric part.
    seed : int, optional
    table : mapping of str to Quantity, optional
        Rows that declare the parity of the inputs.

    Returns
    -------
    list of AuditCheck
    """
    sample = sample_inputs(regions, seed)
    answers = [_answer(closure, region.inputs) for region in regions]
    everything = [
        *answers,
        _answer(closure, extreme_inputs(sample, seed, table)),
        _answer(closure, degenerate_inputs(sample)),
    ]
    tensor = np.concatenate([answer.tensor for answer in everything])
    fields = [
        (region, np.nan_to_num(region.on_grid(answer.tensor)))
        for region, answer in zip(regions, answers, strict=True)
    ]
    angles = [rotation(angle) for angle in ANGLES]
    return [
        *_bounds(tensor, floor, cap),
        _symmetry(
            "rotation", _deviation(closure, sample, table, angles),
            "the tensor turns with the model's axes",
        ),
        _symmetry(
            "reflection and hemisphere", _deviation(closure, sample, table, [REFLECTION]),
            "mirrored inputs of the other hemisphere give the mirrored tensor",
        ),
        *_dissipation(fields, seed),
        _stability(fields, cap),
        *_good_behaviour(everything),
    ]  # fmt: skip
