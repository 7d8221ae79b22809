"""What a user gets wrong ends in one clear sentence, code 2, and nothing left behind."""

from __future__ import annotations

import subprocess
import sys

import numpy as np
import pytest

from ensemble_files import write_members, write_study
from learnclosure.cli import main


def leave(arguments, capsys):
    with pytest.raises(SystemExit) as caught:
        main([str(word) for word in arguments])
    return caught.value.code, capsys.readouterr().err.strip()


def refused(arguments, capsys, *words):
    code, text = leave(arguments, capsys)
    assert code == 2, text
    sentence = text.splitlines()[-1]
    assert "Traceback" not in text
    for word in words:
        assert word in sentence, sentence
    return sentence


def every(action):
    return lambda _, dataset: action(dataset)


def last(action, members=4):
    return lambda number, dataset: action(dataset) if number == members - 1 else dataset


def with_attribute(name, key, value):
    def action(dataset):
        dataset[name].attrs[key] = value
        return dataset

    return action


def drop_standard_name(dataset):
    del dataset["x_velocity"].attrs["standard_name"]
    return dataset.rename(x_velocity="zonal")


def only_one_tracer(dataset):
    return dataset.drop_vars(["dye_b", "dye_c", "dye_d"])


def parallel_tracers(dataset):
    for number, name in enumerate(("dye_b", "dye_c", "dye_d"), 2):
        dataset[name] = dataset["dye_a"].copy(data=number * dataset["dye_a"].values)
        dataset[name].attrs["tracer_role"] = "inversion"
    return dataset


def all_land(dataset):
    for name in ("x_velocity", "y_velocity", "dye_a", "dye_b", "dye_c", "dye_d"):
        dataset[name] = dataset[name] * np.nan
        dataset[name].attrs.update(units="1" if name.startswith("dye") else "m s-1")
        if name.startswith("dye"):
            dataset[name].attrs["tracer_role"] = "inversion"
        else:
            dataset[name].attrs["standard_name"] = f"sea_water_{name}"
    return dataset


def hole(dataset):
    dataset["dye_b"].values[1, 0, 4, 5] = np.nan
    return dataset


def other_grid(dataset):
    return dataset.assign_coords(x=("x", dataset["x"].values + 1.0, dataset["x"].attrs))


def other_times(dataset):
    return dataset.assign_coords(time=("time", dataset["time"].values + 1.0, dataset["time"].attrs))


def shifted_velocity(dataset):
    east = dataset["x"].values + 7.5e3
    moved = dataset["x_velocity"].rename(x="x_face")
    moved = moved.assign_coords(x_face=("x_face", east, {"units": "m", "axis": "X"}))
    return dataset.drop_vars("x_velocity").assign(x_velocity=moved)


WRONG = {
    "role not found": (every(drop_standard_name), ("x_velocity", "zonal")),
    "fewer than two tracers": (every(only_one_tracer), ("two tracers",)),
    "parallel gradients": (every(parallel_tracers), ("parallel",)),
    "all land": (every(all_land), ("land",)),
    "NaN inside the sea": (last(hole), ("member_03.nc", "dye_b")),
    "another grid": (last(other_grid), ("member_03.nc", "x")),
    "other times": (last(other_times), ("member_03.nc", "time")),
    "unknown unit": (every(with_attribute("dye_a", "units", "PSU")), ("dye_a", "PSU")),
    "undeclared face": (every(shifted_velocity), ("x_velocity", "face")),
}


@pytest.mark.parametrize("case", WRONG)
def test_wrong_ensembles_are_refused_in_one_sentence(case, tmp_path, capsys):
    change, words = WRONG[case]
    write_members(tmp_path / "north", change=change)
    study = write_study(tmp_path, "north")
    refused(["run", study], capsys, *words)
    assert not list(tmp_path.rglob("*.partial"))
    assert not (tmp_path / "results" / "north" / "statistics.nc").exists()


def test_files_without_a_match_are_named(tmp_path, capsys):
    refused(["run", write_study(tmp_path, "north")], capsys, "north/*.nc")


def test_one_member_is_no_ensemble(tmp_path, capsys):
    write_members(tmp_path / "north", members=1)
    refused(["run", write_study(tmp_path, "north")], capsys, "one member")


def test_a_corrupt_file_is_named(tmp_path, capsys):
    folder = write_members(tmp_path / "north")
    (folder / "member_02.nc").write_bytes(b"\x89HDF\r\n\x1a\n" + b"\0" * 400)
    refused(["run", write_study(tmp_path, "north")], capsys, "member_02.nc")


def test_an_unknown_key_is_named(tmp_path, capsys):
    study = write_study(tmp_path, "north", extra="[diagnosis]\nsmoothing = 3\n")
    refused(["run", study], capsys, "diagnosis.smoothing", "unknown key")


def test_an_output_folder_that_cannot_be_written_is_named(tmp_path, capsys):
    write_members(tmp_path / "north")
    study = write_study(tmp_path, "north")
    study.write_text(study.read_text().replace('"results"', '"file/results"'))
    (tmp_path / "file").write_text("")
    refused(["run", study], capsys, "file/results", "cannot be written")


def test_a_folder_that_is_no_bundle_is_refused(tmp_path, capsys):
    refused(["verify", tmp_path / "none"], capsys, "none")
    refused(["predict", tmp_path, tmp_path / "in.nc", tmp_path / "out.nc"], capsys)
    assert not (tmp_path / "out.nc").exists()


def test_a_wrong_word_on_the_command_line_ends_with_2(capsys):
    code, text = leave(["verify"], capsys)
    assert code == 2
    assert "Missing argument" in text
    code, _ = leave(["simulate", "x", "--kind", "gyre"], capsys)
    assert code == 2


def test_the_program_runs_as_a_command_and_every_help_gives_an_example():
    for command in ("demo", "simulate", "inspect", "diagnose", "train", "evaluate", "export",
                    "run", "verify", "predict", "compare", "report"):  # fmt: skip
        words = [sys.executable, "-c", "from learnclosure.cli import main; main()", command, "-h"]
        done = subprocess.run(words, capture_output=True, text=True, check=True)
        assert f"Example: learnclosure {command}" in " ".join(done.stdout.split())
