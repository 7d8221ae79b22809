"""What inspection says of an ensemble."""

from __future__ import annotations

from ensemble_cases import write_classic
from learnclosure.ensemble.readiness import inspect_ensemble
from learnclosure.study import EnsembleTable


def inspected(folder, change=None, members=4, **table):
    write_classic(folder, members=members, change=change)
    return inspect_ensemble(EnsembleTable(name="north", files="*.nc", **table), folder)


def test_everything_understood_is_told(tmp_path):
    readiness = inspected(tmp_path)
    assert readiness.ready
    assert len(readiness.files) == 4
    facts = readiness.facts
    assert facts["members"] == "4 (0 to 3)"
    assert facts["times"] == "3, 5 days apart"
    assert facts["grid"] == "16 x 12 cells, 2 layers, the top one first"
    assert facts["cell width"] == "15 km along x, 15 km along y"
    assert facts["sea"] == "100.0%, 100.0% of each layer"
    assert facts["periodic"] == "no axis"
    assert facts["dimensions"] == "time = time, layer = layer, y = y, x = x"
    parts = [(line.part, line.variable) for line in readiness.roles]
    assert parts[:3] == [
        ("x_velocity", "x_velocity"), ("y_velocity", "y_velocity"), ("tracer", "dye_a"),
    ]  # fmt: skip
    assert parts[-1] == ("withheld tracer", "dye_d")


def test_what_is_missing_is_told_with_what_it_costs(tmp_path):
    names = {"tracers": ["dye_a", "dye_b"]}
    readiness = inspected(tmp_path, members=2, variables=names)
    assert readiness.ready
    text = " ".join(readiness.missing)
    assert "withheld tracers" in text
    assert "no ceiling" in text


def test_an_unknown_stratification_keeps_the_study_from_running(tmp_path):
    readiness = inspected(tmp_path, lambda _, dataset: dataset.drop_vars("reduced_gravity"))
    assert not readiness.ready
    assert "stratification is unknown" in readiness.problems[0]


def test_a_problem_is_listed_beside_the_variables_of_the_file(tmp_path):
    names = {"x_velocity": "zonal"}
    readiness = inspected(tmp_path, variables=names)
    assert not readiness.ready
    assert "zonal: the variable named by" in readiness.problems[0]
    assert "dye_a (time 3, layer 2, y 12, x 16) [1]" in readiness.variables


def test_files_that_are_not_there_are_a_problem_too(tmp_path):
    table = EnsembleTable(name="north", files="nothing_*.nc")
    readiness = inspect_ensemble(table, tmp_path)
    assert not readiness.ready
    assert "no file matches" in readiness.problems[0]
    assert readiness.variables == []
