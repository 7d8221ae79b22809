"""Ensembles whose reliability is known exactly, whatever their number of members."""

from __future__ import annotations

import numpy as np

from diagnosis_cases import MemoryEnsemble, box

ANGLES = (0.3, 1.5, 3.7)
NAMES = ("dye_a", "dye_b", "dye_c")


def known_law_ensemble(
    *,
    members: int = 12,
    times: int = 4,
    side: int = 40,
    tracers: int = 3,
    seed: int = 0,
    wavelength: float | None = None,
) -> tuple[MemoryEnsemble, np.ndarray]:
    """Cells, members and times independent and normal, with covariances that vary in space.

    ``c = s u + s' v + b`` with unit normal u, v and ``b`` of standard deviation 2 has the
    fluxes ``s`` and ``s'``. The noise of a covariance with n - 1 degrees of freedom is
    ``(<u^2><c^2> + <uc>^2)/(n - 1)`` for jointly normal variables (Wishart 1928,
    Biometrika 20A, 32-52; from memory).

    With a wavelength, in cells, s and s' follow one smooth tensor instead of being random.

    Returns the ensemble and the noise over signal variance of one degree of freedom and
    one time, of each tracer and component, (tracer, component).
    """
    random = np.random.default_rng(seed)
    grid = box(1, side, side)
    shape = (times, members, *grid.shape)
    u, v = random.normal(size=(2, *shape))
    values = {"x_velocity": u, "y_velocity": v}
    slope = random.normal(size=(tracers, 2, *grid.shape))
    xx, yy = np.meshgrid(grid.x, grid.y)
    if wavelength is not None:
        wave = 2.0 * np.pi / (wavelength * 15e3)
        patch = 2.0 + np.sin(wave * xx) * np.cos(wave * yy)
        # c = -K grad C . u with one K that varies smoothly for all tracers.
        for number, angle in enumerate(ANGLES[:tracers]):
            slope[number, 0] = -3.0 * np.cos(angle) * patch
            slope[number, 1] = -3.0 * np.sin(angle) * patch
    ratios = []
    for name, (s_x, s_y), angle in zip(NAMES, slope, ANGLES, strict=False):
        mean = 1e-2 * (np.cos(angle) * xx + np.sin(angle) * yy)
        values[name] = mean + s_x * u + s_y * v + 2.0 * random.normal(size=shape)
        variance = s_x**2 + s_y**2 + 4.0
        ratios.append([float((variance + s**2).mean() / s.var()) for s in (s_x, s_y)])
    return MemoryEnsemble(grid, values, NAMES[:tracers]), np.array(ratios)


def member_products(u: np.ndarray, c: np.ndarray) -> np.ndarray:
    """Products of departures from the mean of all members, (member, ...)."""
    return (u - u.mean(axis=0)) * (c - c.mean(axis=0))
