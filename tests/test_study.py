"""The study file: defaults, closed keys, and errors in one sentence."""

from __future__ import annotations

import pytest

from learnclosure.errors import StudyError
from learnclosure.study import parse_study, read_study

MINIMAL = """
[[ensemble]]
name = "north"
files = "north/*.nc"
"""


def test_a_minimal_study_has_sound_defaults():
    study = parse_study(MINIMAL)
    assert study.ensembles[0].split == "train"
    assert study.diagnosis.floor == 50.0
    assert study.closure.families == ("mean-field", "local-energy")


def test_a_licence_is_written_as_spdx_writes_it():
    study = parse_study(MINIMAL + "[export]\nlicence = 'mit or apache-2.0'\n")
    assert study.export.licence == "MIT OR Apache-2.0"


def test_relative_output_starts_from_the_folder_of_the_study(tmp_path):
    path = tmp_path / "study.toml"
    path.write_text(MINIMAL)
    assert read_study(path).output_folder == tmp_path / "results"


@pytest.mark.parametrize(
    ("text", "message"),
    [
        (MINIMAL + "[diagnosis]\nsmoothing = 3\n", r"diagnosis\.smoothing: unknown key"),
        ("coarsen = 2\n" + MINIMAL, r"coarsen: unknown key"),
        (MINIMAL + MINIMAL, "two ensembles share one name"),
        ("[[ensemble]]\nname = 'a'\nsplit = 'test'\nfiles = 'x'\n", "split = 'train'"),
        ("output = 'x'\n", "ensemble: Field required"),
        (MINIMAL + "[closure]\nfloor = 9e4\n", "cap must lie above floor"),
        (MINIMAL + "[closure]\nfamilies = ['local']\n", r"closure\.families\.0: .*found 'local'"),
        (MINIMAL + "[export]\nlicence = 'do what you like'\n", r"export\.licence: is no SPDX"),
        (MINIMAL + "[export]\nversion = '1.0'\n", r"export\.version: .*found '1\.0'"),
        ("not toml", "not a TOML document"),
        ("folder = '/'\n" + MINIMAL, "folder: unknown key"),
    ],
)
def test_a_wrong_study_ends_in_one_sentence_that_names_the_key(text, message):
    with pytest.raises(StudyError, match=message) as caught:
        parse_study(text, where="study.toml")
    assert str(caught.value).startswith("study.toml")
    assert "\n" not in str(caught.value)


def test_a_missing_or_binary_study_is_refused(tmp_path):
    with pytest.raises(StudyError, match="cannot be read"):
        read_study(tmp_path / "none.toml")
    (tmp_path / "bytes.toml").write_bytes(b"\xff\xfe\x00")
    with pytest.raises(StudyError, match="not a UTF-8 text file"):
        read_study(tmp_path / "bytes.toml")
