"""Whose a bundle is: signatures of the public tool, asked for only where wanted."""

from __future__ import annotations

import shutil
import subprocess

import pytest

from export_cases import export
from learnclosure.errors import BundleError
from learnclosure.export import signature
from learnclosure.export.archive import write_archive
from learnclosure.export.gate import load_bundle, verify_bundle
from learnclosure.export.layout import sums_text
from learnclosure.export.predictor import load_predictor

pytestmark = pytest.mark.skipif(
    shutil.which("ssh-keygen") is None, reason="ssh-keygen is not installed"
)


def make_key(folder, name):
    """Make a key; return its file and the line that allows it."""
    key = folder / name
    words = ["ssh-keygen", "-q", "-t", "ed25519", "-N", "", "-C", name, "-f", str(key)]
    subprocess.run(words, check=True)
    return key, f"{name} {key.with_suffix('.pub').read_text()}"


def sign(folder, key, namespace="learnclosure-bundle"):
    words = ["ssh-keygen", "-Y", "sign", "-q", "-f", str(key), "-n", namespace, "SHA256SUMS"]
    subprocess.run(words, cwd=folder, check=True)


@pytest.fixture(scope="module")
def keys(tmp_path_factory):
    folder = tmp_path_factory.mktemp("keys")
    (author, line), (stranger, _) = make_key(folder, "author"), make_key(folder, "stranger")
    signers = folder / "signers"
    signers.write_text(line)
    return author, stranger, signers


@pytest.fixture(scope="module")
def unsigned(tmp_path_factory):
    return export(tmp_path_factory.mktemp("unsigned") / "bundle", regressor="ridge")


@pytest.fixture
def copy(unsigned, tmp_path):
    return shutil.copytree(unsigned, tmp_path / "copy")


def refused(folder, signers):
    outcome = verify_bundle(folder, signers=signers)
    assert outcome.checks[-1].rule == "signature"
    assert outcome.checks[-1].name == "signature"
    return outcome.checks[-1].found


def test_a_signed_bundle_passes_as_folder_and_as_archive(copy, keys):
    author, _, signers = keys
    sign(copy, author)
    outcome = verify_bundle(copy, signers=signers)
    assert outcome.passed
    check = next(check for check in outcome.checks if check.name == "signature")
    assert check.found == "signed by author"
    write_archive(load_bundle(copy).files, copy.with_suffix(".zip"))
    assert verify_bundle(copy.with_suffix(".zip"), signers=signers).passed


def test_a_signature_nobody_asked_for_is_mentioned(copy, keys):
    sign(copy, keys[0])
    assert verify_bundle(copy).checks[0].found == "7 as expected, signature not checked"


def test_a_bundle_without_signature_is_refused_where_one_is_asked_for(copy, keys):
    assert refused(copy, keys[2]) == "there is no SHA256SUMS.sig"
    with pytest.raises(BundleError, match="rule signature"):
        load_predictor(copy, signers=keys[2])


def test_a_stranger_another_purpose_and_another_text_are_refused(copy, keys):
    author, stranger, signers = keys
    sign(copy, stranger)
    assert refused(copy, signers) == "not signed by an allowed signer"
    (copy / "SHA256SUMS.sig").unlink()
    sign(copy, author, "git")
    assert refused(copy, signers) == "not signed by an allowed signer"
    (copy / "SHA256SUMS.sig").write_bytes(b"-----BEGIN SSH SIGNATURE-----\nAAAA\n")
    assert refused(copy, signers) == "not signed by an allowed signer"


def test_a_changed_bundle_does_not_keep_its_signature(copy, keys):
    sign(copy, keys[0])
    (copy / "MODEL_CARD.md").write_text("# other\n")
    assert verify_bundle(copy, signers=keys[2]).checks[-1].rule == "sums"
    files = {path.name: path.read_bytes() for path in copy.iterdir()}
    (copy / "SHA256SUMS").write_bytes(sums_text(files))
    assert refused(copy, keys[2]) == "not signed by an allowed signer"


def test_missing_signers_and_a_missing_program_are_said(copy, keys, monkeypatch):
    with pytest.raises(BundleError, match="nobody: does not exist; give a file of allowed signers"):
        verify_bundle(copy, signers=copy / "nobody")
    monkeypatch.setattr(signature.shutil, "which", lambda _: None)
    with pytest.raises(BundleError, match="ssh-keygen is not installed; install OpenSSH"):
        verify_bundle(copy, signers=keys[2])
