"""Nobody ever sees half of a file or folder."""

from __future__ import annotations

import pytest

from learnclosure.atomic import atomic_folder, atomic_path, prepare_folder
from learnclosure.errors import OutputError
from learnclosure.stages import Artefacts, fingerprint


def fail_half_way(writer, name):
    with writer as temporary:
        (temporary / name).write_text("half")
        raise KeyError


def test_a_failed_write_leaves_the_old_file_and_nothing_else(tmp_path):
    target = tmp_path / "artefact.json"
    target.write_text("old")
    with pytest.raises(KeyError):
        fail_half_way(atomic_path(target), "")
    assert target.read_text() == "old"
    assert [path.name for path in tmp_path.iterdir()] == ["artefact.json"]


def test_a_failed_folder_leaves_the_old_folder_and_nothing_else(tmp_path):
    target = tmp_path / "bundle"
    target.mkdir()
    (target / "a").write_text("old")
    with pytest.raises(KeyError):
        fail_half_way(atomic_folder(target), "a")
    assert (target / "a").read_text() == "old"
    assert [path.name for path in tmp_path.iterdir()] == ["bundle"]


def test_a_finished_folder_replaces_the_old_one_as_a_whole(tmp_path):
    target = tmp_path / "bundle"
    target.mkdir()
    (target / "stale").write_text("old")
    with atomic_folder(target) as temporary:
        (temporary / "fresh").write_text("new")
    assert [path.name for path in target.iterdir()] == ["fresh"]


def test_a_folder_below_a_file_is_refused_in_one_sentence(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match=r"file.*cannot be written.*choose a folder"):
        prepare_folder(tmp_path / "file" / "below")


def test_a_stage_is_current_only_while_inputs_and_outputs_are_unchanged(tmp_path):
    places = Artefacts(tmp_path)
    output = places.statistics("north")
    output.parent.mkdir()
    output.write_text("1")
    mark = fingerprint("diagnose", {"floor": 50.0})
    assert not places.current("diagnose", mark, [output])
    places.note("diagnose", mark, [output])
    assert places.current("diagnose", mark, [output])
    assert not places.current("diagnose", fingerprint("diagnose", {"floor": 60.0}), [output])
    output.write_text("2")
    assert not places.current("diagnose", mark, [output])
