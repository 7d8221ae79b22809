"""The kernels: accurate in single precision, the same to the last bit however work is shared."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from diagnosis_cases import MemoryEnsemble, box, random_ensemble
from learnclosure.diagnosis import eddies
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.moments import accumulate_moments
from moments_cases import GappedEnsemble, uneven_grid, with_thickness

quick = settings(derandomize=True, deadline=None, max_examples=10)


class ByRows(MemoryEnsemble):
    """A source that can be read by part."""

    def fields_of(self, time, members, rows):
        """Return a view of some members and rows."""
        return {name: values[time][members, :, rows] for name, values in self.values.items()}


class WeightedByRows(ByRows):
    """The same, weighted by thickness."""

    weighted = True


def single(ensemble, kind=MemoryEnsemble):
    values = {name: value.astype(np.float32) for name, value in ensemble.values.items()}
    return kind(ensemble.grid, values, ensemble.tracers, ensemble.withheld_tracers)


def same(one, other):
    assert one.whole.flux.keys() == other.whole.flux.keys()
    pairs = [(one.whole, other.whole), *zip(one.halves, other.halves, strict=True)]
    for first, second in pairs:
        for name in first.flux:
            np.testing.assert_array_equal(first.flux[name], second.flux[name])
        for name in first.mean:
            np.testing.assert_array_equal(first.mean[name], second.mean[name])
        np.testing.assert_array_equal(first.eddy_kinetic_energy, second.eddy_kinetic_energy)
    for first, second in zip(one.left_out, other.left_out, strict=True):
        for name in first[1]:
            np.testing.assert_array_equal(first[1][name], second[1][name])


def test_a_mean_ten_thousand_times_the_eddies_costs_no_accuracy():
    # A mean of products would lose all eight digits of single precision here.
    grid = box(2, 6, 8)
    ensemble = random_ensemble(grid, members=24, times=3, tracers=3)
    for name, values in ensemble.values.items():
        ensemble.values[name] = (values + 1e4 * values.std()).astype(np.float32)
    exact = {name: value.astype(np.longdouble) for name, value in ensemble.values.items()}
    found = accumulate_moments(single(ensemble), Coarsening(grid, 2)).whole
    for axis, name in (("x_velocity", "dye_a"), ("y_velocity", "dye_c")):
        u, c = (exact[key] - exact[key].mean(axis=1, keepdims=True) for key in (axis, name))
        fine = (u * c).sum(axis=1).mean(axis=0) / 23
        expected = fine.reshape(2, 3, 2, 4, 2).mean(axis=(2, 4)).astype(np.float64)
        error = found.flux[name]["xy".index(axis[0])] / expected - 1.0
        assert np.abs(error).max() < 1e-6


def test_single_precision_is_read_as_it_is():
    # Numbers that single precision holds exactly give the same bytes in both.
    ensemble = random_ensemble(uneven_grid(), members=5, times=2)
    for name, values in ensemble.values.items():
        ensemble.values[name] = values.astype(np.float32).astype(np.float64)
    coarsening = Coarsening(ensemble.grid, 2)
    same(accumulate_moments(ensemble, coarsening), accumulate_moments(single(ensemble), coarsening))


@pytest.mark.parametrize("members", [5, 18])
@pytest.mark.parametrize("definition", ["ensemble", "ensemble-subgrid", "time"])
def test_reading_by_rows_gives_the_same_bytes(definition, members, monkeypatch):
    ensemble = random_ensemble(uneven_grid(9, 11), members=members, times=3, tracers=3)
    coarsening = Coarsening(ensemble.grid, 2)
    whole = accumulate_moments(ensemble, coarsening, definition)
    by_rows = ByRows(ensemble.grid, ensemble.values, ensemble.tracers, ensemble.withheld_tracers)
    # A band of two rows at a time.
    monkeypatch.setattr(eddies, "BAND_BYTES", 1.0)
    same(whole, accumulate_moments(by_rows, coarsening, definition))


def test_reading_layers_by_rows_gives_the_same_bytes(monkeypatch):
    ensemble = with_thickness(uneven_grid(8, 6))
    coarsening = Coarsening(ensemble.grid, 3)
    whole = accumulate_moments(ensemble, coarsening)
    monkeypatch.setattr(eddies, "BAND_BYTES", 1.0)
    by_rows = WeightedByRows(
        ensemble.grid, ensemble.values, ensemble.tracers, ensemble.withheld_tracers
    )
    same(whole, accumulate_moments(by_rows, coarsening))


@quick
@given(columns=st.integers(1, 400), factor=st.integers(1, 7), rows=st.integers(1, 5))
def test_a_cell_does_not_depend_on_how_wide_the_grid_is(columns, factor, rows):
    grid = box(1, rows, columns)
    wide = random_ensemble(box(1, rows, 400), members=4, times=1, tracers=3)
    values = {name: value[..., :columns] for name, value in wide.values.items()}
    narrow = MemoryEnsemble(grid, values, wide.tracers, wide.withheld_tracers)
    found = accumulate_moments(narrow, Coarsening(grid, factor)).whole.flux["dye_a"]
    every = accumulate_moments(wide, Coarsening(wide.grid, factor)).whole.flux["dye_a"]
    full = columns // factor
    np.testing.assert_array_equal(found[..., :full], every[..., :full])


def test_members_that_may_be_missing_but_are_not_change_nothing():
    ensemble = random_ensemble(uneven_grid(), members=5, times=2, tracers=3)
    gapped = GappedEnsemble(
        ensemble.grid, ensemble.values, ensemble.tracers, ensemble.withheld_tracers
    )
    coarsening = Coarsening(ensemble.grid, 2)
    same(accumulate_moments(ensemble, coarsening), accumulate_moments(gapped, coarsening))


MEASURE = """
import sys, resource
import numpy as np
sys.path.insert(0, {tests!r})
from diagnosis_cases import MemoryEnsemble, box
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.moments import accumulate_moments

grid, members = box(1, 256, 256), int(sys.argv[1])

class Made(MemoryEnsemble):
    member_labels = tuple(range(members))
    times = np.arange(2.0)
    has_buoyancy = False

    def fields_of(self, time, members, rows):
        chosen = range(*members.indices(len(self.member_labels)))
        shape = (1, len(range(*rows.indices(256))), 256)
        names = ("x_velocity", "y_velocity", "dye_a", "dye_b")
        return {{
            name: np.stack([
                np.random.default_rng([time, n, k]).random(shape, dtype=np.float32)
                for n in chosen
            ])
            for k, name in enumerate(names)
        }}

source = Made(grid, {{}}, ("dye_a", "dye_b"))
accumulate_moments(source, Coarsening(grid, 4))
print(resource.getrusage(resource.RUSAGE_SELF).ru_maxrss)
"""


def test_memory_does_not_grow_with_members():
    from pathlib import Path

    script = MEASURE.format(tests=str(Path(__file__).parent))
    peaks = [
        int(
            subprocess.run(
                [sys.executable, "-c", script, str(members)],
                capture_output=True, text=True, check=True,
            ).stdout
        )
        for members in (24, 192)
    ]  # fmt: skip
    assert peaks[1] < 1.1 * peaks[0]
