"""A plan predicts what the diagnosis then costs and finds, and names what is degenerate."""

from __future__ import annotations

import json
import subprocess
import sys

import numpy as np
import pytest

from ceiling_cases import known_law_ensemble
from diagnosis_cases import MemoryEnsemble, box, random_ensemble
from ensemble_files import run_command, write_members, write_study
from learnclosure.diagnosis.artefact import write_statistics
from learnclosure.diagnosis.coarse import Coarsening
from learnclosure.diagnosis.costs import inversions_needed, predicted_memory
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.diagnosis.estimate import Estimator
from learnclosure.diagnosis.inversion import SmoothInversion
from learnclosure.diagnosis.moments import accumulate_moments
from learnclosure.diagnosis.planning import plan_diagnosis
from learnclosure.diagnosis.probe import choose_window, crop_grid
from learnclosure.diagnosis.prospects import conditioning, effective_number, lag_correlation
from learnclosure.diagnosis.sampling import jackknife_standard_error
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.errors import DiagnosisError
from learnclosure.features.artefact import write_features
from learnclosure.inspection import inspect_study
from learnclosure.listing import plan_facts
from learnclosure.study import DiagnosisSettings, EnsembleTable, parse_study, read_study

PLAIN = DiagnosisSettings(coarsen=1, floor_method="projection")


def test_effective_number_of_an_autoregressive_series():
    # Mean of AR(1) with r = .9 (Bayley and Hammersley 1946): exactly 5.8139 of 100; with
    # many, n (1 - r)/(1 + r) = .05263 n. Product of two AR(1): (1 - r1 r2)/(1 + r1 r2).
    assert effective_number(0.9 ** np.arange(100), 100) == pytest.approx(5.8139, abs=0.35)
    assert effective_number(0.9 ** np.arange(12), 100) == pytest.approx(5.8139, abs=5e-5)
    assert effective_number(0.9 ** np.arange(8), 100_000) == pytest.approx(5263.2, rel=1e-3)
    product = (0.9 * 0.8) ** np.arange(8)
    assert effective_number(product, 100_000) == pytest.approx(16279.0, rel=1e-3)


def test_times_that_have_forgotten_each_other_all_count():
    assert effective_number(np.array([1.0, 0.01, 0.0]), 40) == 40.0
    assert np.isnan(effective_number(np.array([1.0]), 40))


def autoregressive(times=8, members=6, r=0.8, cells=(1, 20, 20), seed=0):
    random = np.random.default_rng(seed)
    series = [random.normal(size=(members, *cells))]
    for _ in range(times - 1):
        series.append(r * series[-1] + np.sqrt(1 - r**2) * random.normal(size=(members, *cells)))
    return np.stack(series)


def test_the_memory_of_eddies_is_got_back_from_few_times():
    series = autoregressive()
    found = lag_correlation(series - series.mean(axis=1, keepdims=True))
    np.testing.assert_allclose(found[:5], 0.8 ** np.arange(5), atol=0.05)


def two_gradients(angle):
    grid = box(1, 6, 6)
    xx, yy = np.meshgrid(grid.x, grid.y)
    turn = np.radians(angle)
    random = np.random.default_rng(0)
    shape = (1, 3, *grid.shape)
    values = {"x_velocity": random.normal(size=shape), "y_velocity": random.normal(size=shape)}
    noise = 1e-3 * random.normal(size=(2, *shape))
    noise -= noise.mean(axis=2, keepdims=True)
    values["dye_a"] = xx + noise[0]
    values["dye_b"] = np.cos(turn) * xx + np.sin(turn) * yy + noise[1]
    return MemoryEnsemble(grid, values, ("dye_a", "dye_b"))


@pytest.mark.parametrize(("angle", "number"), [(5.0, 22.904), (30.0, 3.732), (90.0, 1.0)])
def test_condition_of_two_gradients(angle, number):
    # cot(angle/2), by elementary geometry of two unit vectors.
    ensemble = two_gradients(angle)
    plan, problems = plan_diagnosis(ensemble, PLAIN)
    assert problems == []
    assert plan.conditioning.median == pytest.approx(number, rel=1e-3)
    assert plan.conditioning.ninth_decile == pytest.approx(number, rel=1e-3)
    assert plan.conditioning.angle == pytest.approx(angle, rel=1e-3)
    assert plan.conditioning.closest_pair == ("dye_a", "dye_b")
    assert plan.conditioning.undetermined == 0.0


def test_nearly_parallel_tracers_are_named_with_the_share_of_cells_lost():
    ensemble = random_ensemble(box(1, 10, 10), tracers=4)
    ensemble.values["dye_c"] = ensemble.values["dye_a"] * 2.0 + 1.0
    ensemble.tracers = ("dye_a", "dye_c")
    geometry = ensemble.grid.geometry
    moments = accumulate_moments(ensemble, Coarsening(ensemble.grid, 1))
    estimator = Estimator.from_settings(
        geometry, geometry.area[None], PLAIN, ensemble.tracers, moments.whole.mean
    )
    found = conditioning(estimator, moments)
    assert found.undetermined == 1.0
    assert found.closest_pair == ("dye_a", "dye_c")
    assert found.angle < 1e-6


def test_the_window_is_cut_where_there_is_most_sea():
    mask = np.zeros((1, 300, 40), bool)
    mask[:, 190:300, :] = True
    grid = box(1, 300, 40, mask=mask, periodic=(True, True))
    rows, columns = choose_window(Coarsening(grid, 2))
    assert (rows.start, rows.stop) == (188, 300) or rows.start >= 108
    assert (columns.start, columns.stop) == (0, 40)
    cut = crop_grid(grid, (rows, columns))
    assert cut.geometry.mask.sum() == mask[:, rows].sum() == mask.sum()
    assert cut.geometry.periodic_x
    assert not cut.geometry.periodic_y
    assert cut.y[0] == grid.y[rows.start]


def test_a_plan_reads_few_times_once_each():
    ensemble = random_ensemble(box(1, 10, 10), times=30)
    plan, _ = plan_diagnosis(ensemble, PLAIN)
    assert ensemble.asked == list(range(8))
    assert plan.times_read == 8


def test_the_predicted_error_is_that_of_the_whole_ensemble():
    # 8 of 24 independent times and all members: the error falls with the root of times.
    ensemble, _ = known_law_ensemble(members=10, times=24, side=24, wavelength=12.0)
    plan, _ = plan_diagnosis(ensemble, PLAIN, target_error=0.1)
    geometry = ensemble.grid.geometry
    area = np.broadcast_to(geometry.area, geometry.mask.shape)
    moments = accumulate_moments(ensemble, Coarsening(ensemble.grid, 1))
    estimator = Estimator.from_settings(geometry, area, PLAIN, ensemble.tracers, moments.whole.mean)
    error = jackknife_standard_error(np.trace(estimator.left_out(moments), axis1=-2, axis2=-1))
    trace = np.trace(estimator.group(moments.whole).smooth.tensor, axis1=-2, axis2=-1)
    actual = np.sqrt((error**2).sum() / ((trace**2).sum() - (error**2).sum()))
    assert plan.error.error == pytest.approx(actual, rel=0.3)
    assert plan.error.members_needed == pytest.approx(1 + 9 * (plan.error.error / 0.1) ** 2)
    assert plan.sampling.effective == pytest.approx(24.0)


def test_inversions_are_counted_right(monkeypatch):
    for members, withheld in ((5, 1), (8, 0), (3, 1)):
        ensemble = random_ensemble(box(1, 6, 6), members=members, times=5, withheld=withheld)
        calls = []
        fit = SmoothInversion.fit
        monkeypatch.setattr(
            SmoothInversion,
            "fit",
            lambda self, equations, fit=fit, calls=calls, **how: (
                calls.append(1) or fit(self, equations, **how)
            ),
        )
        diagnose(ensemble, DiagnosisSettings(coarsen=1, ceiling_draws=3))
        monkeypatch.undo()
        tracers = len(ensemble.tracers)
        assert len(calls) == inversions_needed(members, 5, tracers, withheld, 3)


def test_sizes_of_artefacts_are_predicted(tmp_path):
    write_members(tmp_path / "north", members=5, rows=40, columns=56)
    table = EnsembleTable(name="north", files="north/*.nc")
    with open_ensemble(table, tmp_path) as ensemble:
        plan, problems = plan_diagnosis(ensemble)
        statistics = diagnose(ensemble)
    assert problems == []
    write_statistics(statistics, tmp_path / "statistics.nc")
    write_features(statistics, tmp_path / "features.nc")
    for name, predicted in plan.costs.artefacts.items():
        assert predicted == pytest.approx((tmp_path / name).stat().st_size, rel=0.1), name
    stored = sum(path.stat().st_size for path in (tmp_path / "north").iterdir())
    assert plan.costs.bytes_read / 2 == pytest.approx(stored, rel=0.2)
    assert plan.costs.passes == plan.costs.checksum_passes == 1


RESIDENT = """
import sys
from learnclosure.diagnosis.diagnose import diagnose
from learnclosure.ensemble.reader import open_ensemble
from learnclosure.listing import plan_facts
from learnclosure.study import DiagnosisSettings, EnsembleTable
with open_ensemble(EnsembleTable(name="north", files="*.nc"), sys.argv[1]) as ensemble:
    diagnose(ensemble, DiagnosisSettings(ceiling_draws=1, floor_method="projection"))
# Unlike the resource usage, this does not begin with the size of the process that started it.
with open("/proc/self/status") as status:
    peak = next(line for line in status if line.startswith("VmHWM"))
print(float(peak.split()[1]) * 1024)
"""


def test_memory_is_predicted_within_a_factor_of_one_and_a_half(tmp_path):
    write_members(tmp_path, members=8, rows=72, columns=96, times=4)
    done = subprocess.run(
        [sys.executable, "-c", RESIDENT, str(tmp_path)], capture_output=True, text=True, check=True
    )
    actual = float(done.stdout.split()[-1])
    with open_ensemble(EnsembleTable(name="north", files="*.nc"), tmp_path) as ensemble:
        found = predicted_memory(ensemble, Coarsening(ensemble.grid, 2), ensemble.stored_bytes)
    assert actual / 1.5 < found < actual * 1.5


def spoilt(change, **shape):
    ensemble = random_ensemble(box(1, 8, 8), **shape)
    change(ensemble.values)
    return ensemble


def make_identical(values):
    values["dye_b"] = values["dye_a"].copy()


def make_constant(values):
    values["dye_b"] = np.full_like(values["dye_b"], 3.0)


def make_climatology(values):
    values["dye_b"] = np.broadcast_to(values["dye_b"][:, :1], values["dye_b"].shape).copy()


def make_still(values):
    for name in ("x_velocity", "y_velocity"):
        values[name] = np.broadcast_to(values[name][:, :1], values[name].shape).copy()


@pytest.mark.parametrize(
    ("change", "message"),
    [
        (make_still, "the velocities are the same in all members, so there are no eddies"),
        (make_identical, r"two tracers are identical \(found 'dye_a' and 'dye_b'"),
        (make_constant, "dye_b: a tracer has no variance"),
        (make_climatology, "dye_b: a tracer is the same in all members and so has no eddies"),
    ],
)
def test_tracers_without_information_are_refused_and_planned_as_problems(change, message):
    ensemble = spoilt(change)
    _, problems = plan_diagnosis(ensemble, PLAIN)
    assert len(problems) == 1
    with pytest.raises(DiagnosisError, match=message) as caught:
        diagnose(ensemble, PLAIN)
    assert str(caught.value) == problems[0]
    assert "\n" not in problems[0]


def test_a_member_that_is_a_copy_is_found():
    def copied(values):
        for array in values.values():
            array[:, 4] = array[:, 2]

    _, problems = plan_diagnosis(spoilt(copied), PLAIN)
    assert problems == [
        "region 'basin': two members are identical (found 2 and 4, expected independent "
        "members); remove the copy: it would count as a member without being one."
    ]


def test_fewer_than_three_members_tell_no_error():
    plan, problems = plan_diagnosis(random_ensemble(box(1, 8, 8), members=2), PLAIN)
    assert problems == []
    assert np.isnan(plan.error.members_needed)


def test_json_says_what_the_table_says(tmp_path, capsys):
    write_members(tmp_path / "north", members=4, times=4)
    study = write_study(tmp_path, "north")
    assert run_command("inspect", "--json", "--target-error", "0.5", study) == 0
    found = json.loads(capsys.readouterr().out)
    assert found["ready"]
    (north,) = found["ensembles"]
    assert north["name"] == "north"
    assert north["facts"]["members"] == "4 (0 to 3)"
    assert north["plan"]["error"]["target"] == 0.5
    assert north["plan"]["costs"]["passes"] == 1
    assert north["plan"]["sampling"]["spacing"] == 5.0
    assert run_command("inspect", study) == 0
    text = " ".join(capsys.readouterr().out.split())
    for words in ("members needed", "condition number", "artefacts", "the study can run"):
        assert words in text


class Accumulating(MemoryEnsemble):
    """Offers what a model accumulated between snapshots as well."""

    def fields(self, time):
        """Add fluxes inside the sampling window."""
        found = super().fields(time)
        return {
            **found,
            **{f"{t}_within_{axis}": 0.0 * found[t] for t in self.tracers for axis in "xy"},
        }


def test_accumulated_fluxes_are_told_from_snapshots():
    snapshots = random_ensemble(box(1, 8, 8), times=4)
    plan, _ = plan_diagnosis(snapshots, PLAIN)
    assert not plan.sampling.accumulated
    assert any("snapshots miss the flux between them" in text for _, text in plan_facts(plan))
    sums = Accumulating(
        snapshots.grid, snapshots.values, snapshots.tracers, snapshots.withheld_tracers
    )
    plan, _ = plan_diagnosis(sums, PLAIN)
    assert plan.sampling.accumulated
    assert any("accumulated total fluxes are read" in text for _, text in plan_facts(plan))


def test_problems_make_the_command_fail_with_all_of_them(tmp_path, capsys):
    def twins(number, dataset):
        dataset["dye_b"].values[:] = dataset["dye_a"].values
        return dataset.isel(time=slice(1, None)) if number == 3 else dataset

    write_members(tmp_path / "north", members=4, change=twins)
    study = write_study(tmp_path, "north")
    assert run_command("inspect", "--json", study) == 2
    captured = capsys.readouterr()
    found = json.loads(captured.out)
    assert not found["ready"]
    assert "a member lacks 1 of 3 times" in found["ensembles"][0]["problems"][0]
    assert "the study cannot run: 1 problem(s)" in captured.err


def test_a_later_time_that_is_damaged_is_a_problem_of_the_plan(tmp_path):
    def hole(number, dataset):
        if number == 1:
            dataset["dye_b"].values[2] = np.nan
        return dataset

    write_members(tmp_path / "north", members=4, change=hole)
    study = read_study(write_study(tmp_path, "north"))
    (found,) = inspect_study(study)
    assert found.plan is None
    assert "a member has no values at one time" in found.readiness.problems[0]
    assert "time number 2" in found.readiness.problems[0]


def test_the_study_key_for_draws_is_checked():
    text = '[[ensemble]]\nname = "north"\nfiles = "*.nc"\n[diagnosis]\nceiling_draws = 0\n'
    assert parse_study(text).diagnosis.ceiling_draws == 0
