"""Mean gradients as eddies remember them: carried by the mean flow and blurred.

Eddies reach a place with what they took up upstream. The emerging ``memory`` form of the
transport tensor therefore acts on ``g'`` instead of the mean gradient ``g`` of the place,

    (1 + T U . grad - l^2 lap) g' = g

with the time T the flow remembers and the length l over which eddies mix. ``J = -K g'``
then holds with one local K where ``J = -K g`` does not.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt
from scipy.sparse import coo_matrix, csc_matrix
from scipy.sparse.linalg import splu

from learnclosure.diagnosis.systems import sea_faces
from learnclosure.ensemble.grid import Geometry

FloatArray = npt.NDArray[np.float64]


def memory_matrix(
    velocity: tuple[FloatArray, FloatArray], geometry: Geometry, layer: int,
    time: float, length: float,
) -> csc_matrix:  # fmt: skip
    """Matrix of ``1 + T U . grad - l^2 lap`` on the cells of a layer.

    Parameters
    ----------
    velocity : tuple of ndarray, shape (y, x), m s-1
        Mean velocity along x and y.
    geometry : Geometry
    layer : int
    time : float, s
    length : float, m

    Returns
    -------
    scipy.sparse.csc_matrix, shape (y x, y x), 1
        Each row sums to one: a uniform gradient stays what it is. Nothing passes coasts.

    Notes
    -----
    Centred differences; where the flow crosses more than two blurring lengths squared a
    cell, the blurring is raised to what keeps the matrix monotone (the hybrid scheme of
    Spalding 1972, International Journal for Numerical Methods in Engineering 4, 551-559).
    """
    size = geometry.mask[layer].size
    rows, columns, values = [np.arange(size)], [np.arange(size)], [np.ones(size)]
    for axis, here, there, distance, side in sea_faces(geometry, layer):
        component = velocity[0] if axis == -1 else velocity[1]
        speed = 0.5 * (component.ravel()[here] + component.ravel()[there])
        carried = 0.5 * time * speed * side
        blurred = np.maximum(length**2 * side / distance, np.abs(carried))
        for cell, other, sign in ((here, there, 1.0), (there, here, -1.0)):
            strength = (sign * carried - blurred) / geometry.area.ravel()[cell]
            rows += [cell, cell]
            columns += [other, cell]
            values += [strength, -strength]
    entries = (np.concatenate(values), (np.concatenate(rows), np.concatenate(columns)))
    return csc_matrix(coo_matrix(entries, shape=(size, size)))


class MemoryGradient:
    """Turns mean gradients into remembered ones; factorised once per layer.

    Parameters
    ----------
    velocity : tuple of ndarray, shape (layer, y, x), m s-1
        Mean velocity along x and y.
    geometry : Geometry
    time : float, s
        How long the flow remembers a gradient.
    length : float, m
        How far eddies blur it.
    """

    def __init__(
        self, velocity: tuple[FloatArray, FloatArray], geometry: Geometry,
        time: float, length: float,
    ) -> None:  # fmt: skip
        self._factors = [
            splu(
                memory_matrix(
                    (velocity[0][layer], velocity[1][layer]), geometry, layer, time, length
                )
            )
            for layer in range(len(geometry.mask))
        ]

    def __call__(self, gradient: FloatArray) -> FloatArray:
        """Return the remembered gradient.

        Parameters
        ----------
        gradient : ndarray, shape (2, layer, y, x)
            Mean gradient along x and y.

        Returns
        -------
        ndarray, shape (2, layer, y, x)
        """
        remembered = np.empty_like(gradient)
        for layer, factor in enumerate(self._factors):
            sides = gradient[:, layer].reshape(2, -1).T
            remembered[:, layer] = factor.solve(sides).T.reshape(gradient[:, layer].shape)
        return remembered
