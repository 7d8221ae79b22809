"""Ensembles whose eddy transport tensor is known exactly.

Velocities are the same everywhere in a layer, so that a tracer ``C = G . x + c'(t)`` with
``dc'/dt = -u' . G - lambda c'`` solves nonlinear advection, and any diffusion, exactly.
Its mean gradient is ``G`` and its eddy flux ``<u' c'>`` is known in closed form; with the
flux written ``J = -K G`` both make ``K``.

Sources: Taylor 1922, Proc. London Math. Soc. 20, 196-212, for the dispersion integral;
Borgas, Flesch and Sawford 1997, J. Fluid Mech. 332, 141-171, for spinning motion; Plumb
1979, J. Atmos. Sci. 36, 1699-1704, for waves (all from memory; the formulas are also
derived in the docstrings).
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import partial
from pathlib import Path
from typing import Any

import numpy as np
import numpy.typing as npt

from learnclosure.atomic import atomic_folder
from learnclosure.errors import InputError
from learnclosure.simulate.files import (
    Layout,
    MemberFile,
    TracerLabel,
    expect_counts,
    is_complete,
    write_record,
)
from learnclosure.simulate.regimes import DAY

Float64 = npt.NDArray[np.floating[Any]]
Complex = npt.NDArray[np.complex128]
Gradients = Sequence[tuple[float, float]]

GRADIENTS: Gradients = ((1.0e-6, 0.0), (0.3e-6, 0.9e-6), (-0.6e-6, 0.7e-6), (0.2e-6, -1.1e-6))
"""Mean gradients of the tracers for the inversion, m-1."""

WITHHELD_GRADIENTS: Gradients = ((0.8e-6, 0.5e-6),)
"""Mean gradients of the withheld tracers, m-1."""

CELLS = 8
SPACING = 15.0e3
STEPS_IN_MEMORY = 50
"""Steps in the memory time of the velocity: trapezoid errors stay below 1e-4."""


def exact_spinning_tensor(
    ub: float, T: float, Omega: float, *, relaxation: float = 0.0, time: float = np.inf
) -> Float64:
    """Transport tensor of a spinning Ornstein-Uhlenbeck velocity.

    With ``<u_i(t) u_j(t - s)> = ub^2 exp(-s/T) R_ij(Omega s)``, ``R`` a rotation, the
    integral over ``s`` from 0 to ``time`` gives ``S + i alpha = ub^2 (1 - exp(-w time)) / w``
    with ``w = 1/T + relaxation - i Omega`` and ``K = [[S, -alpha], [alpha, S]]``.

    Parameters
    ----------
    ub : float, m s-1
        Standard deviation of each velocity component.
    T : float, s
        Memory time.
    Omega : float, s-1
        Rate at which the velocity turns, counter-clockwise if positive.
    relaxation : float, optional, s-1
        Rate ``lambda`` at which tracer anomalies decay.
    time : float, optional, s
        Time since the anomalies were zero.

    Returns
    -------
    ndarray, shape (2, 2), m2 s-1
        Rows are flux components, columns gradient components.

    Examples
    --------
    >>> exact_spinning_tensor(0.1, 2e5, 2.5e-6).round(6)
    array([[1600., -800.],
           [ 800., 1600.]])
    """
    rate = 1.0 / T + relaxation - 1j * Omega
    grown = 1.0 - np.exp(-rate * time) if np.isfinite(time) else 1.0
    both = ub**2 * grown / rate
    return np.array([[both.real, -both.imag], [both.imag, both.real]], dtype=np.float64)


def exact_plane_wave_tensor(
    a: float, b: float, frequency: float, *, relaxation: float = 0.0
) -> Float64:
    """Transport tensor of the velocity ``(a cos(w t), -b sin(w t))``.

    ``S = lambda / (lambda^2 + w^2) diag(a^2, b^2) / 2`` and
    ``K_xy = -K_yx = a b w / (lambda^2 + w^2) / 2``.

    Parameters
    ----------
    a, b : float, m s-1
        Amplitudes along x and y; the velocity turns clockwise if both are positive.
    frequency : float, s-1
        Angular frequency ``w``.
    relaxation : float, optional, s-1
        Rate ``lambda`` at which tracer anomalies decay.

    Returns
    -------
    ndarray, shape (2, 2), m2 s-1
        Rows are flux components, columns gradient components.

    Examples
    --------
    >>> exact_plane_wave_tensor(0.1, 0.05, 2 * np.pi / (20 * 86400)).round(4) + 0.0
    array([[   0.    ,  687.5494],
           [-687.5494,    0.    ]])
    """
    half = 0.5 / (relaxation**2 + frequency**2)
    skew = half * a * b * frequency
    return np.array(
        [[half * relaxation * a * a, skew], [-skew, half * relaxation * b * b]], dtype=np.float64
    )


def _per_layer(where: str, **values: float | Sequence[float]) -> list[Float64]:
    """Give every parameter one value a layer."""
    arrays = [np.atleast_1d(np.asarray(value, dtype=np.float64)) for value in values.values()]
    layers = max(array.size for array in arrays)
    if any(array.ndim > 1 or array.size not in (1, layers) for array in arrays):
        raise InputError(
            "parameters name different numbers of layers",
            where=where,
            found=", ".join(
                f"{name}: {array.size}" for name, array in zip(values, arrays, strict=True)
            ),
            expected="one value, or one a layer",
            remedy="give lists of the same length",
        )
    return [np.broadcast_to(array, (layers,)) for array in arrays]


def _expect_positive(where: str, **values: Float64 | float) -> None:
    for name, value in values.items():
        if not np.all(np.isfinite(value)) or np.any(np.asarray(value) <= 0):
            raise InputError(
                "must be positive and finite", where=f"{where}: {name}", found=value,
                remedy="correct it",
            )  # fmt: skip


def _layout(
    title: str, layers: int, times: Float64, gradients: Gradients, withheld: Gradients
) -> Layout:
    axis = (np.arange(CELLS) - 0.5 * (CELLS - 1)) * SPACING
    thickness = np.linspace(1000.0, 3000.0, layers) if layers > 1 else np.array([4000.0])
    labels = [
        TracerLabel(f"{stem}_{number}", f"tracer with mean gradient ({gx:g}, {gy:g}) m-1", role)
        for stem, role, group in (
            ("tracer", "inversion", gradients), ("withheld", "withheld", withheld),
        )
        for number, (gx, gy) in enumerate(group, start=1)
    ]  # fmt: skip
    return Layout(
        title=title,
        source="learnclosure exactly solvable ensemble",
        x=axis,
        y=axis,
        layer_thickness=thickness,
        reduced_gravity=np.full(layers - 1, 0.02),
        sea_floor_depth=np.full((CELLS, CELLS), thickness.sum()),
        coriolis_parameter=1.0e-4,
        planetary_beta=2.0e-11,
        periodic="",
        times=times / DAY,
        tracers=tuple(labels),
        precision="f8",
    )


def _write(
    folder: Path, layout: Layout, velocity: Complex, anomalies: Float64, slopes: Float64,
    record: dict[str, Any],
) -> None:  # fmt: skip
    """Write members from ``velocity`` (time, member, layer), ``anomalies`` (.., tracer)."""
    steady = (
        slopes[:, 0, None, None] * layout.x[None, None, :]
        + slopes[:, 1, None, None] * layout.y[None, :, None]
    )
    shape = (*velocity.shape[::2], CELLS, CELLS)
    with atomic_folder(folder) as temporary:
        for member in range(velocity.shape[1]):
            flow = velocity[:, member, :, None, None]
            fields = {
                "x_velocity": np.broadcast_to(flow.real, shape),
                "y_velocity": np.broadcast_to(flow.imag, shape),
            }
            for index, label in enumerate(layout.tracers):
                fields[label.name] = steady[index] + anomalies[:, member, :, None, None, index]
            with MemberFile(temporary, member, layout) as file:
                file.write(slice(None), fields)
        write_record(temporary, record)


def simulate_spinning(
    folder: Path,
    *,
    members: int = 200,
    snapshots: int = 40,
    ub: float | Sequence[float] = 0.1,
    T: float | Sequence[float] = (2.0e5, 1.0e5),
    Omega: float | Sequence[float] = (2.5e-6, 1.0e-5),
    relaxation: float = 5.0e-6,
    gradients: Gradients = GRADIENTS,
    withheld_gradients: Gradients = WITHHELD_GRADIENTS,
    spinup_days: float = 40.0,
    spacing_days: float = 5.0,
    seed: int = 0,
) -> Path:
    """Write an ensemble of spinning Ornstein-Uhlenbeck velocities and exact tracers.

    ``du = (-u/T + Omega z x u) dt + sqrt(2 ub^2 / T) dW`` is stepped exactly from its
    stationary law; anomalies start at zero and follow by the trapezoid rule with the
    exact decay. The tensor is that of `exact_spinning_tensor`, layer by layer.

    Parameters
    ----------
    folder : Path
        The ensemble's own folder.
    members, snapshots : int, optional
    ub : float or sequence, optional, m s-1
        Standard deviation of each velocity component, one value or one a layer.
    T : float or sequence, optional, s
        Memory time.
    Omega : float or sequence, optional, s-1
        Rate at which the velocity turns.
    relaxation : float, optional, s-1
        Decay rate of the anomalies; without it they wander and never settle.
    gradients, withheld_gradients : sequence of pairs, optional, m-1
        Mean gradients of the tracers.
    spinup_days, spacing_days : float, optional, days
        Time of the first snapshot, and between snapshots.
    seed : int, optional

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    InputError
        If parameters are out of range.
    OutputError
        If the folder cannot be written or holds something else.
    """
    where = "spinning ensemble"
    expect_counts(where, [("members", members, 1), ("snapshots", snapshots, 1)])
    speeds, memories, turns = _per_layer(where, ub=ub, T=T, Omega=Omega)
    _expect_positive(
        where, ub=speeds, T=memories, spinup_days=spinup_days, spacing_days=spacing_days
    )
    record = {
        "kind": "spinning", "members": members, "snapshots": snapshots, "ub": speeds.tolist(),
        "T": memories.tolist(), "Omega": turns.tolist(), "relaxation": relaxation,
        "gradients": [list(pair) for pair in gradients],
        "withheld_gradients": [list(pair) for pair in withheld_gradients],
        "spinup_days": spinup_days, "spacing_days": spacing_days, "seed": seed,
    }  # fmt: skip
    if is_complete(folder, record, members):
        return folder
    slopes = np.array([*gradients, *withheld_gradients], dtype=np.float64)
    draw = partial(_complex_normals, np.random.default_rng(seed), (members, len(speeds)))
    velocity = speeds * draw()
    anomalies = np.zeros((members, len(speeds), len(slopes)))
    kept: list[tuple[Complex, Float64]] = []
    shortest = float(memories.min()) / STEPS_IN_MEMORY
    for interval in [spinup_days * DAY] + [spacing_days * DAY] * (snapshots - 1):
        steps = int(np.ceil(interval / shortest))
        step = interval / steps
        turn = np.exp((-1.0 / memories + 1j * turns) * step)
        kick = speeds * np.sqrt(-np.expm1(-2.0 * step / memories))
        decay = np.exp(-relaxation * step)
        for _ in range(steps):
            carried = _along(velocity, slopes) * decay
            velocity = turn * velocity + kick * draw()
            anomalies = decay * anomalies - 0.5 * step * (carried + _along(velocity, slopes))
        kept.append((velocity, anomalies))
    times = (spinup_days + spacing_days * np.arange(snapshots)) * DAY
    layout = _layout(
        "spinning Ornstein-Uhlenbeck ensemble", len(speeds), times, gradients, withheld_gradients
    )
    _write(
        folder, layout, np.stack([pair[0] for pair in kept]),
        np.stack([pair[1] for pair in kept]), slopes, record,
    )  # fmt: skip
    return folder


def _complex_normals(generator: np.random.Generator, shape: tuple[int, int]) -> Complex:
    """Draw independent ``xi_1 + i xi_2``."""
    real, imaginary = generator.standard_normal((2, *shape))
    return np.asarray(real + 1j * imaginary, dtype=np.complex128)


def _along(velocity: Complex, slopes: Float64) -> Float64:
    """Velocity along each mean gradient, shape (..., tracer)."""
    return np.asarray(
        velocity.real[..., None] * slopes[:, 0] + velocity.imag[..., None] * slopes[:, 1],
        dtype=np.float64,
    )


def simulate_plane_wave(
    folder: Path,
    *,
    members: int = 12,
    snapshots: int = 40,
    a: float | Sequence[float] = 0.1,
    b: float | Sequence[float] = 0.05,
    frequency: float | Sequence[float] = (2 * np.pi / (20 * DAY), 2 * np.pi / (30 * DAY)),
    relaxation: float = 1.0 / (50 * DAY),
    gradients: Gradients = GRADIENTS,
    withheld_gradients: Gradients = WITHHELD_GRADIENTS,
    spacing_days: float = 5.0,
) -> Path:
    """Write an ensemble of plane waves ``(a cos(w t + p), -b sin(w t + p))``.

    Members have equally spaced phases ``p``, so that with three or more the ensemble mean
    of the velocity vanishes and second moments with 1/N are exact to rounding at every
    time: the unbiased ones, with N - 1, are N / (N - 1) times those of
    `exact_plane_wave_tensor`. Anomalies are the particular solution
    ``c' = -Re[(a G_x + i b G_y) exp(i (w t + p)) / (lambda + i w)]``.

    Parameters
    ----------
    folder : Path
        The ensemble's own folder.
    members, snapshots : int, optional
        At least three members.
    a, b : float or sequence, optional, m s-1
        Amplitudes along x and y, one value or one a layer.
    frequency : float or sequence, optional, s-1
        Angular frequency.
    relaxation : float, optional, s-1
        Decay rate of the anomalies.
    gradients, withheld_gradients : sequence of pairs, optional, m-1
        Mean gradients of the tracers.
    spacing_days : float, optional, days
        Time between snapshots.

    Returns
    -------
    Path
        The folder.

    Raises
    ------
    InputError
        If parameters are out of range.
    OutputError
        If the folder cannot be written or holds something else.
    """
    where = "plane-wave ensemble"
    expect_counts(where, [("members", members, 3), ("snapshots", snapshots, 1)])
    along, across, pace = _per_layer(where, a=a, b=b, frequency=frequency)
    _expect_positive(where, frequency=np.abs(pace), spacing_days=spacing_days)
    record = {
        "kind": "plane-wave", "members": members, "snapshots": snapshots, "a": along.tolist(),
        "b": across.tolist(), "frequency": pace.tolist(), "relaxation": relaxation,
        "gradients": [list(pair) for pair in gradients],
        "withheld_gradients": [list(pair) for pair in withheld_gradients],
        "spacing_days": spacing_days,
    }  # fmt: skip
    if is_complete(folder, record, members):
        return folder
    slopes = np.array([*gradients, *withheld_gradients], dtype=np.float64)
    times = spacing_days * DAY * np.arange(snapshots)
    phase = pace * times[:, None, None] + 2 * np.pi * np.arange(members)[None, :, None] / members
    velocity = along * np.cos(phase) - 1j * across * np.sin(phase)
    wave = np.exp(1j * phase) / (relaxation + 1j * pace)
    amplitude = along[:, None] * slopes[:, 0] + 1j * across[:, None] * slopes[:, 1]
    anomalies = -np.real(amplitude * wave[..., None])
    layout = _layout("plane-wave ensemble", len(pace), times, gradients, withheld_gradients)
    _write(folder, layout, velocity, anomalies, slopes, record)
    return folder
