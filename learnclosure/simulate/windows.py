"""Time means of velocities, tracers and total tracer fluxes over windows of many steps."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import numpy.typing as npt

from learnclosure.simulate.kernels import HALO, Field

Float64 = npt.NDArray[np.float64]


@dataclass(frozen=True)
class WindowMeans:
    """Means over the steps of one window.

    Attributes
    ----------
    corner : ndarray, shape (member, 2, y, x), m2 s-1
        Streamfunction at north-east corners.
    vorticity : ndarray, shape (member, 2, y, x), s-1
        Potential vorticity without its uniform gradient.
    tracers : ndarray, shape (member, 2, tracer, y, x)
    flux_x, flux_y : ndarray, shape (member, 2, tracer, y, x), m s-1
        Total tracer fluxes through the east and the north face of each cell, as the scheme
        moved them.
    """

    corner: Float64
    vorticity: Float64
    tracers: Float64
    flux_x: Float64
    flux_y: Float64


class WindowSums:
    """Running sums of one window.

    Parameters
    ----------
    shape : tuple of int
        Shape of the padded tracers, (member, 2, tracer, y + 6, x + 6).
    """

    def __init__(self, shape: tuple[int, ...]) -> None:
        members, layers, tracers, rows, stride = shape
        inner = rows - 2 * HALO
        columns = stride - 2 * HALO
        self.steps = 0
        self.corner: Float64 = np.zeros((members, layers, inner, columns))
        self.vorticity: Float64 = np.zeros_like(self.corner)
        self.content: Field = np.zeros((members, layers, tracers, inner, stride), np.float32)
        self.flux_x: Field = np.zeros_like(self.content)
        self.flux_y: Field = np.zeros((members, layers, tracers, inner + 1, stride), np.float32)

    def means(self, cell_over_step: float) -> WindowMeans:
        """Turn sums into means.

        Parameters
        ----------
        cell_over_step : float, m s-1
            Cell width over time step.

        Returns
        -------
        WindowMeans
        """
        cells = slice(HALO, -HALO)
        east = slice(HALO + 1, self.content.shape[-1] - HALO + 1)
        flux = cell_over_step / self.steps
        return WindowMeans(
            corner=self.corner / self.steps,
            vorticity=self.vorticity / self.steps,
            tracers=self.content[..., cells].astype(np.float64) / self.steps,
            flux_x=self.flux_x[..., east].astype(np.float64) * flux,
            flux_y=self.flux_y[..., 1:, cells].astype(np.float64) * flux,
        )
