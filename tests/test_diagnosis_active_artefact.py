"""The active side in the statistics of a region and in the report's table."""

from __future__ import annotations

import numpy as np
import pytest
from compliance_checker.cf.cf_1_11 import CF1_11Check
from compliance_checker.suite import CheckSuite

from active_cases import noisy_active, sloping_levels
from learnclosure.active_quantities import ACTIVE_STATISTICS
from learnclosure.diagnosis.artefact import write_statistics
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.quantities import MEAN_STATE, STATISTICS
from learnclosure.report.active import active_rows
from learnclosure.study import DiagnosisSettings

PLAIN = DiagnosisSettings(coarsen=1)


@pytest.fixture(scope="module")
def statistics():
    ensemble = noisy_active(members=6, times=2)
    ensemble.units = {"potential_vorticity": "s-1"}
    return diagnose(ensemble, PLAIN)


def test_every_row_is_there_with_its_units_and_dimensions(statistics):
    for name, row in ACTIVE_STATISTICS.items():
        assert statistics[name].dims == row.dims, name
        assert statistics[name].attrs["units"] == row.units
        assert statistics[name].attrs["long_name"]
    for name in ("potential_vorticity_eddy_flux_x", "potential_vorticity_reconstructed_flux_y"):
        assert statistics[name].dims == ("layer", "y", "x")
        assert statistics[name].attrs["units"] == "s-1 m s-1"
    assert statistics["potential_vorticity_gradient_y"].attrs["units"] == "s-1 m-1"
    assert statistics["potential_vorticity_eddy_flux_x_halves"].sizes["half"] == 2
    assert not set(ACTIVE_STATISTICS) & {*STATISTICS, *MEAN_STATE}


def test_verdicts_and_the_bound_stand_in_the_attributes(statistics):
    assert statistics.attrs["energy_bound_violations"] == 0
    words = ("carries", "does not carry", "cannot be told")
    for of in ("flux", "divergence"):
        verdicts = statistics.attrs[f"potential_vorticity_{of}_verdict"].split("; ")
        assert len(verdicts) == 2
        assert set(verdicts) <= set(words)
    assert statistics.attrs["potential_vorticity_verdict_threshold"] == 0.5


def test_the_reconstruction_is_the_tensor_on_the_gradient_in_the_file(statistics):
    K = {name: statistics[f"transport_tensor_{name}"].values for name in ("yx", "yy")}
    slope = {axis: statistics[f"potential_vorticity_gradient_{axis}"].values for axis in "xy"}
    expected = -(K["yx"] * slope["x"] + K["yy"] * slope["y"])
    found = statistics["potential_vorticity_reconstructed_flux_y"].values
    known = np.isfinite(expected)
    assert known.any()
    np.testing.assert_allclose(found[known], expected[known], rtol=1e-9)


def test_the_public_checker_finds_no_error_in_the_file(statistics, tmp_path):
    mine = [name for name in statistics if name in ACTIVE_STATISTICS or "vorticity" in name]
    path = tmp_path / "statistics.nc"
    write_statistics(statistics[mine], path)
    suite = CheckSuite()
    suite.checkers = {"cf:1.11": CF1_11Check}
    dataset = suite.load_dataset(str(path))
    results, failures = suite.run_all(dataset, ["cf:1.11"])["cf:1.11"]
    assert not failures
    assert [
        message
        for result in results
        if result.weight == 3 and result.value[0] < result.value[1]
        for message in result.msgs
    ] == []


def test_on_levels_buoyancy_takes_the_place_of_interface_height():
    ensemble, diffusivity = sloping_levels(4e-6, 5e-9)
    found = diagnose(ensemble, PLAIN)
    assert found["gm_coefficient"].dims == ("layer", "y", "x")
    assert found["gm_coefficient_mean"].dims == ("layer",)
    assert "buoyancy" in found["gm_coefficient"].attrs["long_name"]
    np.testing.assert_allclose(found["gm_coefficient_mean"], diffusivity, rtol=1e-9)
    assert "potential_vorticity_diffusivity" not in found
    assert "potential_vorticity_flux_verdict" not in found.attrs


def test_without_halves_nothing_is_claimed_that_needs_them():
    found = diagnose(noisy_active(members=3, times=2), PLAIN)
    assert "interface_diffusivity" not in found
    assert "potential_vorticity_diffusivity" not in found
    assert np.isnan(found["potential_vorticity_flux_reliability"]).all()
    assert np.isfinite(found["gm_coefficient_mean_standard_error"]).all()


def test_without_active_fields_nothing_is_added():
    ensemble = noisy_active(members=4, times=1)
    for name in ensemble.active:
        del ensemble.values[name]
    ensemble.active = ()
    found = diagnose(ensemble, PLAIN)
    assert not set(ACTIVE_STATISTICS) & set(found.variables)
    assert active_rows({"west": found}) == []


def test_the_same_tensor_comes_out_with_and_without_active_fields(statistics):
    ensemble = noisy_active(members=6, times=2)
    ensemble.active = ()
    for name in ("potential_vorticity", "thickness", "interface_height"):
        del ensemble.values[name]
    plain = diagnose(ensemble, PLAIN)
    for name in plain.data_vars:
        np.testing.assert_array_equal(plain[name].values, statistics[name].values, err_msg=name)


def test_the_report_says_what_the_statistics_say(statistics):
    (row,) = active_rows({"west": statistics})
    assert row[0] == "west"
    gm = float(statistics["gm_coefficient_mean"][0])
    error = float(statistics["gm_coefficient_mean_standard_error"][0])
    assert row[1] == f"{gm:.0f} ± {error:.0f}"
    assert statistics.attrs["potential_vorticity_flux_verdict"].split("; ")[0] in row[4]
    assert "unseen half" in row[6]
    assert "constant" in row[7]
    assert row[8] == "0"
    levels, _ = sloping_levels(4e-6, 5e-9)
    (other,) = active_rows({"deep": diagnose(levels, PLAIN)})
    assert other[4] == "–"
    assert "mean" in other[1]
