"""Who made a bundle: a detached OpenSSH signature of its sums, checked by ``ssh-keygen``.

The format is that of ``PROTOCOL.sshsig`` of the OpenSSH project. An author signs with
``ssh-keygen -Y sign -f KEY -n learnclosure-bundle SHA256SUMS`` inside the folder, which
writes ``SHA256SUMS.sig``; a receiver keeps a file of allowed signers (``ssh-keygen(1)``,
ALLOWED SIGNERS). The program is needed only by those who ask for a signature.
"""

from __future__ import annotations

import shutil
import subprocess
import tempfile
from collections.abc import Mapping
from pathlib import Path

from learnclosure.errors import BundleError
from learnclosure.export.checks import RefusalError
from learnclosure.export.layout import SIGNATURE_FILE, SUMS_FILE

NAMESPACE = "learnclosure-bundle"
PROGRAM = "ssh-keygen"
SECONDS = 10.0


def check_signature(files: Mapping[str, bytes], signers: Path) -> str:
    """Insist on a signature of the sums by an allowed signer.

    Parameters
    ----------
    files : mapping of str to bytes
        Files of the bundle.
    signers : Path
        File of allowed signers.

    Returns
    -------
    str
        Who signed.

    Raises
    ------
    RefusalError
        If there is no signature, or none of an allowed signer.
    BundleError
        If the program or the file of signers is missing.
    """
    if not signers.is_file():
        raise BundleError("does not exist", where=signers, remedy="give a file of allowed signers")
    program = shutil.which(PROGRAM)
    if program is None:
        raise BundleError(
            f"{PROGRAM} is not installed", remedy="install OpenSSH, or verify without signers"
        )
    if SIGNATURE_FILE not in files:
        raise RefusalError("signature", f"there is no {SIGNATURE_FILE}")
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / SIGNATURE_FILE
        path.write_bytes(files[SIGNATURE_FILE])
        common = [program, "-Y"]
        found = _run([*common, "find-principals", "-s", str(path), "-f", str(signers)], b"")
        for signer in found.replace(",", "\n").split():
            words = [*common, "verify", "-f", str(signers), "-I", signer, "-n", NAMESPACE]
            if _run([*words, "-s", str(path)], files[SUMS_FILE]):
                return f"signed by {signer}"
    raise RefusalError("signature", "not signed by an allowed signer")


def _run(words: list[str], content: bytes) -> str:
    """Return what the program prints, or nothing if it refuses."""
    try:
        done = subprocess.run(
            words, input=content, capture_output=True, timeout=SECONDS, check=False
        )
    except subprocess.TimeoutExpired:
        return ""
    return done.stdout.decode(errors="replace") if done.returncode == 0 else ""
