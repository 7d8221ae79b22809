"""What a field of transport tensors does to tracers on a grid: variance and time step."""

from __future__ import annotations

import math

import numpy as np
import numpy.typing as npt

from learnclosure.ensemble.grid import Geometry, divergence

FloatArray = npt.NDArray[np.float64]


def adjoint_gradient(field: FloatArray, geometry: Geometry) -> tuple[FloatArray, FloatArray]:
    """Gradient whose negative adjoint is the finite-volume divergence.

    Parameters
    ----------
    field : ndarray, shape (layer, y, x)
    geometry : Geometry

    Returns
    -------
    along_x, along_y : ndarray, shape (layer, y, x)
        Mean of the differences through both faces of a cell; a coast counts as none.
    """

    def along(axis: int, periodic: bool, side: FloatArray) -> FloatArray:
        ahead_wet = geometry.mask & np.roll(geometry.mask, -1, axis=axis)
        if not periodic:
            np.moveaxis(ahead_wet, axis, 0)[-1] = False
        length = 0.5 * (side + np.roll(side, -1, axis=axis))
        step = np.where(ahead_wet, length * (np.roll(field, -1, axis=axis) - field), 0.0)
        total = 0.5 * (step + np.roll(step, 1, axis=axis)) / geometry.area
        return np.asarray(total, dtype=np.float64)

    return (
        along(-1, geometry.periodic_x, geometry.dy),
        along(-2, geometry.periodic_y, geometry.dx),
    )


def smooth_tracer(shape: tuple[int, ...], random: np.random.Generator) -> FloatArray:
    """Make a sum of long waves that fits any periodic grid.

    Parameters
    ----------
    shape : tuple of int
        Ending in y and x.
    random : numpy.random.Generator

    Returns
    -------
    ndarray of that shape
    """
    y, x = np.meshgrid(
        np.arange(shape[-2]) / shape[-2], np.arange(shape[-1]) / shape[-1], indexing="ij"
    )
    field = np.zeros(shape)
    for _ in range(6):
        wave = random.integers(-4, 5, 2)
        phase = random.uniform(0.0, 2.0 * math.pi)
        field += random.normal() * np.cos(2.0 * math.pi * (wave[0] * x + wave[1] * y) + phase)
    return field


def variance_budget(
    tensor: FloatArray, geometry: Geometry, tracer: FloatArray
) -> tuple[float, float]:
    """Change of tracer variance a tensor field makes, as shares of its own size.

    ``-sum A C div J`` for the fluxes of the symmetric and of the antisymmetric part, with
    the finite-volume divergence and its adjoint gradient.

    Parameters
    ----------
    tensor : ndarray, shape (4, layer, y, x), m2 s-1
    geometry : Geometry
    tracer : ndarray, shape (layer, y, x)

    Returns
    -------
    symmetric : float
        Production by S over ``sum A |grad C|^2 tr S / 2``; negative means dissipation.
    antisymmetric : float
        Size of the production by alpha over ``sum A |grad C|^2 |alpha|``; zero but for rounding.
    """
    along_x, along_y = adjoint_gradient(tracer, geometry)
    xx, xy, yx, yy = tensor
    shear, alpha = 0.5 * (xy + yx), 0.5 * (yx - xy)
    area = np.where(geometry.mask, geometry.area, 0.0)
    square = area * (along_x * along_x + along_y * along_y)

    def production(flux_x: FloatArray, flux_y: FloatArray) -> float:
        return float(-(area * tracer * divergence(flux_x, flux_y, geometry)).sum())

    by_symmetric = production(-(xx * along_x + shear * along_y), -(shear * along_x + yy * along_y))
    by_alpha = production(alpha * along_y, -alpha * along_x)
    scale_symmetric = float((square * 0.5 * np.abs(xx + yy)).sum())
    scale_alpha = float((square * np.abs(alpha)).sum())
    return (
        by_symmetric / scale_symmetric if scale_symmetric != 0.0 else 0.0,
        abs(by_alpha) / scale_alpha if scale_alpha != 0.0 else 0.0,
    )


def stable_time_step(tensor: FloatArray, geometry: Geometry) -> float:
    """Longest explicit Euler step of the diffusive part, in seconds.

    ``dt (Kxx/dx^2 + Kyy/dy^2) <= 1/2`` for centred differences; cross terms do not tighten
    it while S is positive semi-definite.

    Parameters
    ----------
    tensor : ndarray, shape (4, layer, y, x), m2 s-1
    geometry : Geometry

    Returns
    -------
    float
        Seconds; infinite where nothing diffuses.

    Examples
    --------
    >>> import numpy as np
    >>> width = np.full((1, 1), 100e3)
    >>> cell = Geometry(width, width, np.ones((1, 1, 1), bool), True, True)
    >>> stable_time_step(np.array([1e3, 0.0, 0.0, 1e3]).reshape(4, 1, 1, 1), cell)
    2500000.0
    """
    rate = float((tensor[0] / geometry.dx**2 + tensor[3] / geometry.dy**2).max())
    return 0.5 / rate if rate > 0.0 else math.inf if rate <= 0.0 else math.nan
