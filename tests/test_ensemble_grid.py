"""Finite differences on masked, periodic and walled grids."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from learnclosure.ensemble.grid import Geometry, divergence, gradient


def geometry(rows, columns, mask=None, periodic_x=False, periodic_y=False, dx=2.0, dy=3.0):
    if mask is None:
        mask = np.ones((1, rows, columns), bool)
    return Geometry(
        np.full((rows, columns), dx), np.full((rows, columns), dy), mask, periodic_x, periodic_y
    )


def test_the_gradient_of_a_linear_field_is_exact_up_to_the_walls():
    box = geometry(5, 7)
    y, x = np.mgrid[0:5, 0:7]
    field = (0.25 * (2.0 * x) - 0.5 * (3.0 * y))[None]
    along_x, along_y = gradient(field, box)
    np.testing.assert_allclose(along_x, 0.25, rtol=1e-14)
    np.testing.assert_allclose(along_y, -0.5, rtol=1e-14)


def test_a_periodic_axis_joins_its_ends():
    columns = 64
    box = geometry(3, columns, periodic_x=True, dx=1.0)
    wave = np.sin(2 * np.pi * np.arange(columns) / columns) * np.ones((1, 3, 1))
    along_x, _ = gradient(wave, box)
    # A centred difference of exp(ikx) is i sin(k dx)/dx exp(ikx): common practice, no source.
    k = 2 * np.pi / columns
    expected = np.sin(k) * np.cos(k * np.arange(columns)) * np.ones((1, 3, 1))
    np.testing.assert_allclose(along_x, expected, atol=1e-15)


@given(st.integers(0, 2**32 - 1), st.booleans(), st.booleans())
@settings(max_examples=25, derandomize=True, deadline=None)
def test_what_stands_on_land_never_reaches_the_sea(seed, periodic_x, periodic_y):
    random = np.random.default_rng(seed)
    mask = random.random((2, 6, 7)) > 0.3
    box = geometry(6, 7, mask, periodic_x, periodic_y)
    field, flux = random.normal(size=(2, 2, 6, 7))
    spoilt_field, spoilt_flux = (np.where(mask, values, np.nan) for values in (field, flux))
    for clean, spoilt in zip(gradient(field, box), gradient(spoilt_field, box), strict=True):
        np.testing.assert_array_equal(clean, spoilt)
    np.testing.assert_array_equal(
        divergence(field, flux, box), divergence(spoilt_field, spoilt_flux, box)
    )


@given(st.integers(0, 2**32 - 1), st.booleans(), st.booleans())
@settings(max_examples=25, derandomize=True, deadline=None)
def test_a_divergence_integrates_to_nothing_whatever_the_coast(seed, periodic_x, periodic_y):
    random = np.random.default_rng(seed)
    mask = random.random((1, 6, 7)) > 0.3
    box = geometry(6, 7, mask, periodic_x, periodic_y)
    found = divergence(random.normal(size=(1, 6, 7)), random.normal(size=(1, 6, 7)), box)
    assert np.all(found[~mask] == 0.0)
    assert abs((found * box.area).sum()) < 1e-12 * np.abs(found * box.area).sum() + 1e-12


@pytest.mark.parametrize("periodic", [True, False])
def test_a_flux_along_the_walls_of_a_uniform_channel_diverges_nowhere(periodic):
    box = geometry(4, 8, periodic_x=periodic)
    found = divergence(np.ones((1, 4, 8)), np.zeros((1, 4, 8)), box)
    inside = found if periodic else found[..., 1:-1]
    np.testing.assert_array_equal(inside, 0.0)
