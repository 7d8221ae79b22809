"""The training table: which cells, in which order, with what weight."""

from __future__ import annotations

import numpy as np
import pytest

from closures_cases import COLUMNS, LAYERS, ROWS, invented_regions, mean_state, with_known_law
from learnclosure.closures.table import table_from_statistics
from learnclosure.errors import TrainingError


def test_every_valid_cell_of_every_region_is_a_row() -> None:
    table = table_from_statistics(invented_regions("mean-field"))
    assert len(table) == 3 * LAYERS * ROWS * COLUMNS
    assert table.regions == ("amber", "birch", "cedar")
    assert table.tensor.shape == (len(table), 4)
    assert table.weight == pytest.approx(9.0e8)


def test_fields_return_to_their_places_on_the_grid() -> None:
    regions = invented_regions("mean-field")
    regions[1]["valid"][0, 3, 5] = 0
    table = table_from_statistics(regions)
    field = table.unflatten(table.tensor, "birch")
    assert field.shape == (LAYERS, ROWS, COLUMNS, 4)
    assert np.isnan(field[0, 3, 5]).all()
    field[0, 3, 5, 1] = regions[1]["transport_tensor_xy"].values[0, 3, 5]
    np.testing.assert_array_equal(field[..., 1], regions[1]["transport_tensor_xy"].values)


def test_land_and_undetermined_cells_are_left_out() -> None:
    region = invented_regions("mean-field")[0]
    region["wet_share"][:, 0, :] = 0.0
    region["wet_share"][:, 1, :] = 0.5
    region["transport_tensor_yy"][1, 4, 4] = np.nan
    region["valid"][0, 6, 6] = 0
    table = table_from_statistics([region])
    assert len(table) == LAYERS * (ROWS - 1) * COLUMNS - 2
    assert table.row.min() == 1
    np.testing.assert_allclose(table.weight[table.row == 1], 4.5e8)


def test_selection_takes_the_same_rows_of_everything() -> None:
    table = table_from_statistics(invented_regions("mean-field"))
    part = table.select(table.region == "birch")
    assert part.regions == ("birch",)
    assert {len(values) for values in part.inputs.values()} == {len(part)}
    np.testing.assert_array_equal(part.unflatten(part.weight, "birch"), 9.0e8)


def test_sampling_error_moves_weight_within_limits_and_within_a_layer() -> None:
    table = table_from_statistics(invented_regions("mean-field"))
    area = table.training_weight("area")
    both = table.training_weight("area-and-sampling")
    assert np.all(area == 1.0)
    assert both.mean() == pytest.approx(1.0)
    assert both.max() / both.min() <= 16.0 + 1e-9
    error = np.sum(table.tensor_error**2, axis=1)
    chosen = (table.region == "amber") & (table.layer == 0)
    assert both[chosen][np.argmin(error[chosen])] > both[chosen][np.argmax(error[chosen])]


def test_regions_that_cannot_be_told_apart_or_used_are_refused() -> None:
    with pytest.raises(TrainingError, match="no region to train on"):
        table_from_statistics([])
    region = with_known_law(mean_state("amber", 0.3, 50e3, 100.0), "mean-field")
    with pytest.raises(TrainingError, match="amber: two regions share one name"):
        table_from_statistics([region, region])
    region["valid"][:] = 0
    with pytest.raises(TrainingError, match="amber: no cell has a determined transport tensor"):
        table_from_statistics([region])


def test_a_tensor_that_acts_on_remembered_gradients_is_not_trained_on() -> None:
    region = with_known_law(mean_state("amber", 0.3, 50e3, 100.0), "mean-field")
    region.attrs["tensor_form"] = "memory"
    with pytest.raises(TrainingError, match="amber: its tensor acts on remembered gradients"):
        table_from_statistics([region])
