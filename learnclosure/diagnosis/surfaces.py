"""Surfaces on which eddies exchange potential energy: interfaces of layers, or levels."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np
import numpy.typing as npt

from learnclosure.diagnosis.moments import EnsembleSource
from learnclosure.ensemble.grid import Geometry, gradient

FloatArray = npt.NDArray[np.float64]


def full_gradient(values: FloatArray, geometry: Geometry, left_out: FloatArray) -> FloatArray:
    """Gradient of a mean field, the uniform part its values leave out included.

    Parameters
    ----------
    values : ndarray, shape (layer, y, x)
    geometry : Geometry
    left_out : ndarray, shape (2, layer)

    Returns
    -------
    ndarray, shape (2, layer, y, x)
        Zero on land.
    """
    slope = np.stack(gradient(values, geometry)) + left_out[:, :, None, None]
    return np.where(geometry.mask, slope, 0.0)


def neighbours_mean(values: FloatArray) -> FloatArray:
    """Mean of adjacent layers, shape (..., layer - 1, y, x)."""
    return np.asarray(0.5 * (values[..., :-1, :, :] + values[..., 1:, :, :]))


@dataclass(frozen=True)
class Surfaces:
    """Interfaces between layers, or levels, of one coarse grid.

    Attributes
    ----------
    kind : {"interface", "layer"}
        ``layer`` for levels that stand still: a surface in the middle of each.
    geometry : Geometry
        Its mask is that of the surfaces.
    area : ndarray, shape (surface, y, x), m2
        Sea area, zero on land.
    left_out : ndarray, shape (2, surface)
        Uniform gradient that the scalar leaves out.
    """

    kind: Literal["interface", "layer"]
    geometry: Geometry
    area: FloatArray
    left_out: FloatArray

    @property
    def scalar(self) -> str:
        """``interface_height`` (m) or ``buoyancy`` (m s-2)."""
        return "interface_height" if self.kind == "interface" else "buoyancy"

    def between(self, values: FloatArray) -> FloatArray:
        """Bring a field of layers to the surfaces.

        Parameters
        ----------
        values : ndarray, shape (..., layer, y, x)

        Returns
        -------
        ndarray, shape (..., surface, y, x)
            Mean of the layers above and below an interface; on levels as it is.
        """
        return neighbours_mean(values) if self.kind == "interface" else values

    def flux(self, fluxes: Mapping[str, FloatArray]) -> FloatArray:
        """Eddy flux of the scalar, shape (2, surface, y, x).

        Parameters
        ----------
        fluxes : mapping of str to ndarray, shape (2, layer, y, x)

        Returns
        -------
        ndarray
            At an interface the mean of what the velocity above and that below carry: the
            height of a layer's upper interface is that of its lower one plus its thickness.
        """
        if self.kind == "layer":
            return fluxes["buoyancy"]
        above = fluxes["interface_height"][:, :-1]
        below = (fluxes["interface_height"] + fluxes["thickness"])[:, 1:]
        return np.where(self.geometry.mask, 0.5 * (above + below), 0.0)

    def gradient(self, means: Mapping[str, FloatArray]) -> FloatArray:
        """Mean gradient of the scalar, shape (2, surface, y, x).

        Parameters
        ----------
        means : mapping of str to ndarray, shape (layer, y, x)

        Returns
        -------
        ndarray
        """
        values = means[self.scalar]
        values = values[:-1] if self.kind == "interface" else values
        return full_gradient(values, self.geometry, self.left_out)


def find_surfaces(source: EnsembleSource, geometry: Geometry, area: FloatArray) -> Surfaces | None:
    """Find the surfaces an ensemble's active fields allow.

    Parameters
    ----------
    source : EnsembleSource
    geometry : Geometry
        Of the coarse grid.
    area : ndarray, shape (layer, y, x), m2
        Sea area of each cell.

    Returns
    -------
    Surfaces or None
        None without ``interface_height`` and ``buoyancy``.
    """
    layers = len(geometry.mask)
    nothing = np.zeros((2, layers))
    if "interface_height" in source.active:
        both = geometry.mask[:-1] & geometry.mask[1:]
        left_out = source.left_out_gradients.get("interface_height", nothing)[:, :-1]
        shared = np.where(both, np.minimum(area[:-1], area[1:]), 0.0)
        return Surfaces("interface", replace(geometry, mask=both), shared, left_out)
    if "buoyancy" in source.active:
        left_out = source.left_out_gradients.get("buoyancy", nothing)
        return Surfaces("layer", geometry, area, left_out)
    return None
