"""Smooth diffusivities, nowhere negative, fitted to the divergence of an eddy flux.

Only the divergence of a flux changes the mean state; much of a raw eddy flux is rotational,
and a diffusivity fitted to it does not carry the divergence. In every layer the diffusivity
``k(y, x)`` minimises

    sum A [div(k g) + div J]^2 + l^2 <g^2> sum A (lap k)^2,   k >= 0,

for the eddy flux J and the mean gradient g. The smoothing length l decides how much of the
sampling noise is fitted: it is the one with which a fit to half of the members explains
most of the divergence in the other half. The diffusivity is bilinear between knots half
of that length apart, or told cell by cell where cells are wider.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
import numpy.typing as npt
from scipy.sparse import coo_matrix, csc_matrix, csr_matrix, diags_array

from learnclosure.diagnosis.knots import Knots, place_knots
from learnclosure.diagnosis.nonnegative import minimise_nonnegative
from learnclosure.diagnosis.skill import divergence_skill
from learnclosure.diagnosis.systems import sea_faces
from learnclosure.ensemble.grid import Geometry, divergence

FloatArray = npt.NDArray[np.float64]

LONGEST = 1.0
"""Longest smoothing length tried, in sides of a square as large as the sea."""

HALVINGS = 7
"""Number of times the smoothing length is halved at most."""

KNOTS_PER_LENGTH = 2.0
"""Knots in a smoothing length, where cells are that fine."""

PATIENCE = 1
"""Halvings without gain after which no shorter length is tried."""


def divergence_operator(geometry: Geometry, layer: int) -> tuple[csr_matrix, csr_matrix]:
    """Matrices of the divergence of a flux at the cell centres of one layer.

    Parameters
    ----------
    geometry : Geometry
    layer : int

    Returns
    -------
    along_x, along_y : scipy.sparse.csr_matrix, shape (y x, y x), m-1
        Their products with the components sum to what ``divergence`` gives.
    """
    size = geometry.mask[layer].size
    parts = []
    for _axis, here, there, _distance, side in sea_faces(geometry, layer):
        half = 0.5 * side
        rows = np.concatenate([here, here, there, there])
        columns = np.concatenate([here, there, here, there])
        values = np.concatenate([half, half, -half, -half])
        matrix = coo_matrix((values, (rows, columns)), shape=(size, size))
        parts.append(csr_matrix(diags_array(1.0 / geometry.area.ravel()) @ matrix))
    return parts[0], parts[1]


@dataclass(frozen=True)
class FluxAndGradient:
    """An eddy flux and the mean gradient it may run down.

    Attributes
    ----------
    flux, gradient : ndarray, shape (2, layer, y, x)
    """

    flux: FloatArray
    gradient: FloatArray


@dataclass(frozen=True)
class SmoothDiffusivity:
    """Diffusivities of all layers and how well they carry the flux divergence.

    Attributes
    ----------
    diffusivity : ndarray, shape (layer, y, x), m2 s-1
        From all members; NaN on land.
    length : ndarray, shape (layer,), m
        Smoothing length; NaN for a layer without any gradient.
    skill, cross_half_skill : ndarray, shape (layer,)
        Coefficient of determination of the divergence the fit was made to, and of that in
        the half of the members a fit to the other half has not seen (mean of both ways).
    constant : ndarray, shape (layer,), m2 s-1
        The best single diffusivity, not negative.
    constant_skill, constant_cross_half_skill : ndarray, shape (layer,)
    raw_flux_skill, raw_flux_cross_half_skill : ndarray, shape (layer,)
        The same of a diffusivity as smooth that was fitted to the flux itself.
    """

    diffusivity: FloatArray
    length: FloatArray
    skill: FloatArray
    cross_half_skill: FloatArray
    constant: FloatArray
    constant_skill: FloatArray
    constant_cross_half_skill: FloatArray
    raw_flux_skill: FloatArray
    raw_flux_cross_half_skill: FloatArray


class _Fit:
    """Normal equations of one layer and one group of members."""

    def __init__(self, layer: _Layer, pair: FluxAndGradient) -> None:
        number, wet = layer.number, layer.wet
        self.layer = layer
        g_x, g_y = (part[number].ravel()[wet] for part in pair.gradient)
        j_x, j_y = (part[number].ravel()[wet] for part in pair.flux)
        self.spread = layer.along_x @ j_x + layer.along_y @ j_y
        self.carry = layer.along_x @ diags_array(g_x) + layer.along_y @ diags_array(g_y)
        weighted = diags_array(layer.area) @ self.carry
        self.normal = csc_matrix(self.carry.T @ weighted)
        self.right = -np.asarray(weighted.T @ self.spread)
        self.square = g_x**2 + g_y**2
        self.mean_square = float(np.average(self.square, weights=layer.area))
        self.down = -(j_x * g_x + j_y * g_y)

    @property
    def constant(self) -> float:
        """Best single diffusivity, not negative."""
        sum_right, sum_normal = float(self.right.sum()), float(self.normal.sum())
        return max(sum_right / sum_normal, 0.0) if sum_normal > 0.0 else 0.0

    def smooth(
        self, length: float, near: FloatArray | None = None, *, raw_flux: bool = False
    ) -> FloatArray:
        """Fit a smooth diffusivity, shape (cell,), to the divergence or to the flux itself.

        A fit ``near`` this one saves time and changes nothing else.
        """
        normal, right = self.normal, self.right
        knots = self.layer.knots(length)
        penalty = length**2 * self.mean_square * knots.roughness
        if raw_flux:
            # Divided by the smoothing length both misfits keep the same scales.
            scale = self.layer.area / length**2
            normal, right = diags_array(scale * self.square), scale * self.down
        reduced = knots.weights.T @ normal @ knots.weights
        size = float(reduced.diagonal().mean())
        weak = diags_array(np.full(knots.weights.shape[1], 1e-12 * size))
        start = None if near is None else knots.weights.T @ near > 0.0
        found = minimise_nonnegative(
            csc_matrix(reduced + penalty + weak), knots.weights.T @ right, start
        )
        return np.asarray(knots.weights @ found)

    def skill(self, diffusivity: FloatArray | float) -> float:
        """Share of this group's divergence that a diffusivity explains."""
        guess = -(self.carry @ (diffusivity * np.ones(len(self.spread))))
        shape = (1, 1, 1, -1)
        found = divergence_skill(
            guess.reshape(shape), self.spread.reshape(shape), self.layer.area.reshape(shape[1:])
        )
        return float(found[0])


class _Layer:
    """Operators of one layer between its sea cells."""

    def __init__(self, geometry: Geometry, area: FloatArray, number: int) -> None:
        self.geometry = geometry
        self.number = number
        self.wet = np.flatnonzero(geometry.mask[number] & (area[number] > 0.0))
        self.area = area[number].ravel()[self.wet]
        self.side = float(np.sqrt(self.area.sum()))
        wet = self.wet
        self.along_x, self.along_y = (
            part[wet][:, wet] for part in divergence_operator(geometry, number)
        )
        self.width = float(np.sqrt(np.median(geometry.area.ravel()[wet])))
        self._knots: dict[int, Knots] = {}

    def knots(self, length: float) -> Knots:
        """Knots close enough for a smoothing length."""
        factor = max(1, int(length / (KNOTS_PER_LENGTH * self.width)))
        if factor not in self._knots:
            self._knots[factor] = place_knots(
                self.geometry, self.number, self.wet, self.area, factor
            )
        return self._knots[factor]


def _cross(fits: Sequence[_Fit], found: Sequence[FloatArray | float]) -> float:
    """Score what each half found on the other half."""
    return 0.5 * (fits[1].skill(found[0]) + fits[0].skill(found[1]))


def _best_length(
    layer: _Layer, halves: Sequence[_Fit]
) -> tuple[float, float, list[FloatArray | None]]:
    """Smoothing length with the best cross-half score, that score, and both fits."""
    best, length, since = -np.inf, np.nan, 0
    found: list[FloatArray | None] = [None, None]
    chosen = found
    for halving in range(HALVINGS + 1):
        tried = LONGEST * layer.side * 0.5**halving
        fits = [half.smooth(tried, near) for half, near in zip(halves, found, strict=True)]
        found = list(fits)
        score = _cross(halves, fits)
        since += 1
        if score > best:
            best, length, chosen, since = score, tried, found, 0
        if since >= PATIENCE:
            break
    return length, best, chosen


def smooth_diffusivity(
    geometry: Geometry,
    area: FloatArray,
    whole: FluxAndGradient,
    halves: Sequence[FluxAndGradient],
) -> SmoothDiffusivity:
    """Fit smooth diffusivities to the divergence of an eddy flux in every layer.

    Parameters
    ----------
    geometry : Geometry
        Its mask tells the sea.
    area : ndarray, shape (layer, y, x), m2
    whole : FluxAndGradient
        Of all members.
    halves : sequence of FluxAndGradient
        Of two halves of the members, which choose the smoothing length.

    Returns
    -------
    SmoothDiffusivity

    Notes
    -----
    Choice by the other half is two-fold cross-validation (Stone 1974, J. Roy. Stat. Soc. B
    36, 111-147; from memory).
    """
    layers = len(geometry.mask)
    field = np.full(geometry.mask.shape, np.nan)
    rows = np.full((8, layers), np.nan)
    for number in range(layers):
        wet = geometry.mask[number] & (area[number] > 0.0)
        if not whole.gradient[:, number][:, wet].any():
            continue
        layer = _Layer(geometry, area, number)
        fit, parts = _Fit(layer, whole), [_Fit(layer, half) for half in halves]
        length, cross, near = _best_length(layer, parts)
        values = fit.smooth(length, near[0])
        raw = [one.smooth(length, raw_flux=True) for one in (fit, *parts)]
        field[number].reshape(-1)[layer.wet] = values
        rows[:, number] = (
            length, fit.skill(values), cross,
            fit.constant, fit.skill(fit.constant), _cross(parts, [one.constant for one in parts]),
            fit.skill(raw[0]), _cross(parts, raw[1:]),
        )  # fmt: skip
    return SmoothDiffusivity(field, *rows)


def diffusive_divergence(
    diffusivity: FloatArray, gradient: FloatArray, geometry: Geometry
) -> FloatArray:
    """Divergence of the flux ``-k g``.

    Parameters
    ----------
    diffusivity : ndarray, shape (layer, y, x), m2 s-1
    gradient : ndarray, shape (2, layer, y, x)
    geometry : Geometry

    Returns
    -------
    ndarray, shape (layer, y, x)
    """
    carried = -np.nan_to_num(diffusivity) * gradient
    return divergence(carried[0], carried[1], geometry)
