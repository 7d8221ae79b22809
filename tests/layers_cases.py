"""Ensembles on levels in memory, and plain references for layers and weighted averages."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from diagnosis_cases import MemoryEnsemble, box

PROFILE = np.array([26.0, 22.0, 15.0, 9.0, 6.0, 4.0])
"""Temperatures of levels, warm above."""
THICKNESS = np.array([50.0, 100.0, 200.0, 400.0, 600.0, 650.0])


def level_grid(rows=5, columns=7, thickness=THICKNESS, mask=None):
    """Make a grid of levels of unequal thickness."""
    grid = box(len(thickness), rows, columns, mask=mask)
    wet = grid.geometry.mask
    return replace(
        grid,
        layer_thickness=np.where(wet, np.asarray(thickness)[:, None, None], 0.0),
        reduced_gravity=None,
        sea_floor_depth=np.where(wet, np.asarray(thickness)[:, None, None], 0.0).sum(axis=0),
        vertical="levels",
    )


def level_ensemble(grid=None, *, members=4, times=2, heave=1.0, seed=0, **more):
    """Velocities, three tracers and a stratifying tracer ``warmth`` that heaves."""
    grid = level_grid() if grid is None else grid
    random = np.random.default_rng(seed)
    shape = (times, members, *grid.shape)
    profile = PROFILE[: grid.shape[0], None, None]
    values = {
        "x_velocity": 0.1 * random.normal(size=shape),
        "y_velocity": 0.1 * random.normal(size=shape),
        **{name: random.normal(size=shape) for name in ("dye_a", "dye_b", "dye_c")},
        "warmth": profile + heave * random.normal(size=(times, members, 1, *grid.shape[1:])),
    }
    values["buoyancy"] = 9.81 * 2e-4 * values["warmth"]
    options = {"tracers": ("dye_a", "dye_b", "dye_c"), "withheld_tracers": ("warmth",)}
    return MemoryEnsemble(grid, values, **{**options, **more})


def sampled_layers(fields, quantity, thickness, edges, *, linear, samples=4000):
    """Assign thin slices of one column to layers by value: slow and independent."""
    content, found = np.zeros((len(fields), len(edges) + 1)), np.zeros(len(edges) + 1)
    wet = np.flatnonzero(thickness > 0.0)
    floor = np.cumsum(thickness[wet])
    centre = floor - 0.5 * thickness[wet]
    for place, level in enumerate(wet):
        share = (np.arange(samples) + 0.5) / samples
        depth = centre[place] + (share - 0.5) * thickness[level]
        value = np.full(samples, quantity[level])
        change = np.zeros(len(fields))
        if linear:
            value = np.interp(depth, centre, quantity[wet])
            if 0 < place < len(wet) - 1:
                faces = [
                    [np.interp(edge, centre, field[wet]) for field in fields]
                    for edge in (floor[place - 1], floor[place])
                ]
                above, below = fields[:, level] - faces[0], faces[1] - fields[:, level]
                least = np.minimum(np.abs(above), np.abs(below))
                change = np.where(above * below > 0.0, 2.0 * np.sign(above) * least, 0.0)
        layers = np.searchsorted(edges, value, side="right")
        for layer, part in zip(layers, share - 0.5, strict=True):
            found[layer] += thickness[level] / samples
            content[:, layer] += (fields[:, level] + change * part) * thickness[level] / samples
    return content, found


def weighted_moments(thickness, velocity, tracer):
    """Thickness-weighted means and flux over axis 0, as de Szoeke and Bennett define them.

    Returns mean thickness, weighted means of velocity and tracer, and ``<h u'' c''>``.
    """
    mean_thickness = thickness.mean(axis=0)
    velocity_mean = (thickness * velocity).mean(axis=0) / mean_thickness
    tracer_mean = (thickness * tracer).mean(axis=0) / mean_thickness
    flux = (thickness * (velocity - velocity_mean) * (tracer - tracer_mean)).mean(axis=0)
    return mean_thickness, velocity_mean, tracer_mean, flux
