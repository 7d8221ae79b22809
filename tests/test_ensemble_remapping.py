"""Columns remapped to layers: conservation, exact profiles, inversions."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from layers_cases import sampled_layers
from learnclosure.ensemble.remapping import inverted_columns, to_layers

quick = settings(max_examples=40, deadline=None, derandomize=True)


def column(*values):
    return np.array(values, dtype=float)[:, None, None]


def random_columns(seed, levels, rows=3, columns=4, fields=3):
    """Draw columns with land below some depth, ties and inversions."""
    random = np.random.default_rng(seed)
    shape = (levels, rows, columns)
    thickness = random.uniform(1.0, 500.0, shape)
    deepest = random.integers(0, levels + 1, shape[1:])
    thickness[np.arange(levels)[:, None, None] >= deepest] = 0.0
    quantity = np.round(np.sort(random.normal(size=shape), axis=0) * 4.0) / 4.0
    quantity += 0.3 * random.normal(size=shape) * (random.random(shape) < 0.3)
    return random.normal(size=(fields, *shape)), quantity, thickness, random


@quick
@given(
    seed=st.integers(0, 10_000),
    levels=st.integers(1, 12),
    edges=st.integers(1, 9),
    linear=st.booleans(),
)
def test_thickness_transport_and_content_of_every_column_are_conserved(seed, levels, edges, linear):
    fields, quantity, thickness, random = random_columns(seed, levels)
    bounds = np.sort(random.normal(size=edges))
    means, found = to_layers(fields, quantity, thickness, bounds, linear=linear)
    assert (found >= 0.0).all()
    np.testing.assert_allclose(found.sum(axis=0), thickness.sum(axis=0), rtol=1e-12)
    scale = (np.abs(fields) * thickness).sum(axis=1) + 1e-300
    gap = (means * found).sum(axis=1) - (fields * thickness).sum(axis=1)
    assert (np.abs(gap) <= 1e-12 * scale).all()
    there = np.broadcast_to(found > 1e-6, means.shape)
    assert means[there].max(initial=-np.inf) <= fields.max() + 1e-9
    assert means[there].min(initial=np.inf) >= fields.min() - 1e-9


@pytest.mark.parametrize("linear", [True, False])
@pytest.mark.parametrize("seed", [0, 1, 2])
def test_layers_are_what_thin_slices_sorted_by_value_give(seed, linear):
    fields, quantity, thickness, _ = random_columns(seed, 7, rows=1, columns=1)
    edges = np.array([-0.9, -0.2, 0.15, 0.8])
    means, found = to_layers(fields, quantity, thickness, edges, linear=linear)
    content, expected = sampled_layers(
        fields[:, :, 0, 0], quantity[:, 0, 0], thickness[:, 0, 0], edges, linear=linear
    )
    np.testing.assert_allclose(found[:, 0, 0], expected, atol=1.0)
    np.testing.assert_allclose((means * found)[:, :, 0, 0], content, atol=1.0)


def test_interfaces_of_a_linear_profile_lie_where_they_should():
    thickness = column(10.0, 30.0, 60.0, 100.0)
    centre = np.cumsum(thickness, axis=0) - 0.5 * thickness
    quantity = 1025.0 + 0.01 * centre
    edges = 1025.0 + 0.01 * np.array([30.0, 90.0, 120.0])
    _, found = to_layers(quantity[None], quantity, thickness, edges)
    np.testing.assert_allclose(found.ravel(), [30.0, 60.0, 30.0, 80.0], rtol=1e-10)


def test_a_tracer_bound_to_the_quantity_is_the_same_in_every_heaved_column():
    # Water moves up and down, layers with it: between the ends their means do not change.
    thickness = np.full((40, 1, 9), 25.0)
    depth = 12.5 + 25.0 * np.arange(40.0)[:, None, None]
    quantity = 1020.0 + 0.01 * (depth + 60.0 * np.sin(np.arange(9.0)))
    edges = np.array([1022.0, 1023.1, 1025.3, 1027.9])
    means, found = to_layers(3.0 * quantity[None], quantity, thickness, edges)
    inner = means[0, 1:-1, 0]
    np.testing.assert_allclose(inner, inner[:, :1] * np.ones(9), rtol=1e-12)
    np.testing.assert_allclose(inner[:, 0], 1.5 * (edges[1:] + edges[:-1]), rtol=1e-12)
    np.testing.assert_allclose(found[1:-1, 0], 100.0 * np.diff(edges)[:, None] * np.ones(9))


def test_constant_reconstruction_gives_whole_cells_to_layers():
    thickness, quantity = column(10.0, 20.0, 30.0), column(1.0, 2.0, 3.0)
    means, found = to_layers(quantity[None], quantity, thickness, np.array([2.0]), linear=False)
    # A value at an edge belongs to the layer below it.
    np.testing.assert_array_equal(found.ravel(), [10.0, 50.0])
    np.testing.assert_allclose(means.ravel(), [1.0, (20 * 2 + 30 * 3) / 50])


@quick
@given(seed=st.integers(0, 1000), linear=st.booleans())
def test_a_column_turned_upside_down_has_the_same_layers(seed, linear):
    fields, quantity, thickness, random = random_columns(seed, 6)
    thickness = np.where(thickness.min(axis=0) > 0.0, thickness, 0.0)
    edges = np.sort(random.normal(size=3))
    one, first = to_layers(fields, quantity, thickness, edges, linear=linear)
    other, second = to_layers(
        fields[:, ::-1].copy(), quantity[::-1].copy(), thickness[::-1].copy(), edges, linear=linear
    )
    np.testing.assert_allclose(first, second, atol=1e-9)
    np.testing.assert_allclose(one * first, other * second, atol=1e-9)


def test_inverted_water_goes_where_its_value_belongs():
    quantity, thickness = column(1.0, 3.0, 2.0, 4.0), column(10.0, 10.0, 10.0, 10.0)
    _, found = to_layers(quantity[None], quantity, thickness, np.array([2.5]), linear=False)
    np.testing.assert_array_equal(found.ravel(), [20.0, 20.0])
    assert inverted_columns(quantity, thickness).all()
    assert not inverted_columns(np.sort(quantity, axis=0), thickness).any()


def test_what_stands_on_land_does_not_invert_a_column():
    quantity, thickness = column(1.0, 2.0, 0.0), column(10.0, 10.0, 0.0)
    assert not inverted_columns(quantity, thickness).any()


def test_water_that_ends_at_an_edge_leaves_nothing_beyond_it():
    quantity, thickness = column(1.0, 2.0, 3.0), column(10.0, 10.0, 10.0)
    _, found = to_layers(quantity[None], quantity, thickness, np.array([1.5, 2.5, 3.5]))
    np.testing.assert_array_equal(found.ravel(), [10.0, 10.0, 10.0, 0.0])
    _, found = to_layers(quantity[None], quantity, thickness, np.array([-1.0, 1.0, 2.5]))
    np.testing.assert_array_equal(found.ravel(), [0.0, 0.0, 20.0, 10.0])


def test_layers_that_are_not_there_are_zero_not_filled():
    quantity, thickness = column(1.0, 2.0), column(10.0, 10.0)
    means, found = to_layers(np.ones((1, 2, 1, 1)), quantity, thickness, np.array([-1.0, 5.0]))
    np.testing.assert_array_equal(found.ravel(), [0.0, 20.0, 0.0])
    np.testing.assert_array_equal(means.ravel(), [0.0, 1.0, 0.0])
