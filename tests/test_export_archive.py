"""One file instead of a folder: the same bytes for the same bundle, read without extraction."""

from __future__ import annotations

import shutil
import subprocess
import sys
import zipfile

import numpy as np
import pytest

from export_cases import export, table
from learnclosure.errors import BundleError, OutputError
from learnclosure.export.archive import archive_bytes, read_archive, write_archive
from learnclosure.export.gate import load_bundle, verify_bundle
from learnclosure.export.predictor import load_predictor


@pytest.fixture(scope="module")
def shipped(tmp_path_factory):
    return export(tmp_path_factory.mktemp("shipped") / "bundle", regressor="ridge")


@pytest.fixture(scope="module")
def archive(shipped):
    path = shipped.with_suffix(".zip")
    write_archive(load_bundle(shipped).files, path)
    return path


def test_an_archive_passes_the_gate_and_predicts_as_its_folder(shipped, archive):
    assert verify_bundle(archive).passed
    inputs = {name: values[:50] for name, values in table("local-energy").inputs.items()}
    folder, packed = load_predictor(shipped), load_predictor(archive)
    for name, values in folder(inputs).items():
        assert np.array_equal(values, packed(inputs)[name])
    assert folder.manifest_digest == packed.manifest_digest


def test_the_same_files_give_the_same_bytes_in_any_order(shipped, archive):
    files = {path.name: path.read_bytes() for path in shipped.iterdir()}
    assert archive_bytes(dict(reversed(files.items()))) == archive.read_bytes()


def test_entries_are_sorted_stored_and_alike(archive):
    with zipfile.ZipFile(archive) as opened:
        entries = opened.infolist()
    assert [entry.filename for entry in entries] == sorted(entry.filename for entry in entries)
    for entry in entries:
        assert entry.date_time == (1980, 1, 1, 0, 0, 0)
        assert entry.external_attr >> 16 == 0o100644
        assert entry.compress_type == zipfile.ZIP_STORED


def test_the_standard_tool_unpacks_it(shipped, archive, tmp_path):
    words = [sys.executable, "-m", "zipfile", "-e", str(archive), str(tmp_path)]
    subprocess.run(words, check=True)
    for path in shipped.iterdir():
        assert (tmp_path / path.name).read_bytes() == path.read_bytes()


def test_a_folder_packed_by_another_tool_is_read_as_well(shipped, tmp_path):
    path = shutil.make_archive(str(tmp_path / "packed"), "zip", shipped)
    # That tool may add an entry for the folder itself.
    with zipfile.ZipFile(path) as opened, zipfile.ZipFile(tmp_path / "flat.zip", "w") as flat:
        for entry in opened.infolist():
            if not entry.is_dir():
                flat.writestr(entry.filename, opened.read(entry), zipfile.ZIP_DEFLATED)
    assert read_archive(tmp_path / "flat.zip") == {
        path.name: path.read_bytes() for path in shipped.iterdir()
    }


def test_a_file_that_is_no_archive_is_refused(tmp_path):
    (tmp_path / "note.txt").write_text("not a bundle")
    with pytest.raises(BundleError, match=r"files failed: not a ZIP file.*rule archive-format"):
        load_predictor(tmp_path / "note.txt")


def test_an_archive_that_cannot_be_written_is_refused(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="cannot be written"):
        write_archive({}, tmp_path / "file" / "bundle.zip")
