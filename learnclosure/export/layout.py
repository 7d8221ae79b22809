"""What a bundle consists of: file names, sizes a receiver accepts, sums."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from pathlib import Path

from learnclosure.errors import BundleError

SCHEMA = "1"

GRAPH_FILE = "closure.onnx"
MANIFEST_FILE = "manifest.json"
REFERENCE_FILE = "reference.nc"
CARD_FILE = "MODEL_CARD.md"
SUMS_FILE = "SHA256SUMS"

LARGEST_SIZES = {
    CARD_FILE: 1 << 20,
    SUMS_FILE: 4096,
    GRAPH_FILE: 128 << 20,
    MANIFEST_FILE: 16 << 20,
    REFERENCE_FILE: 256 << 20,
}
"""Every file of a bundle and the most bytes a receiver reads of it."""


def digest(content: bytes) -> str:
    """Return the SHA-256 of some bytes in hexadecimal.

    Parameters
    ----------
    content : bytes

    Returns
    -------
    str
    """
    return hashlib.sha256(content).hexdigest()


def sums_text(files: Mapping[str, bytes]) -> bytes:
    """Return the contents of ``SHA256SUMS``, which ``sha256sum -c`` understands.

    Parameters
    ----------
    files : mapping of str to bytes
        Contents of the files of the bundle.

    Returns
    -------
    bytes
        One line for each file but the sums themselves, sorted by name.
    """
    names = sorted(name for name in files if name != SUMS_FILE)
    return "".join(f"{digest(files[name])}  {name}\n" for name in names).encode()


def require_bundle(folder: Path) -> None:
    """Insist that a folder is a bundle at all.

    Parameters
    ----------
    folder : Path

    Raises
    ------
    BundleError
        If it is no folder or has no manifest.
    """
    remedy = "give the folder that 'learnclosure export' wrote"
    if not folder.is_dir():
        raise BundleError("is not a folder", where=folder, expected="a bundle", remedy=remedy)
    if not (folder / MANIFEST_FILE).is_file():
        raise BundleError(
            "is not a bundle", where=folder, expected=f"a file {MANIFEST_FILE}", remedy=remedy
        )


def read_files(folder: Path) -> tuple[dict[str, bytes], str | None]:
    """Read the files of a bundle once, within the sizes a receiver accepts.

    Parameters
    ----------
    folder : Path

    Returns
    -------
    files : dict of str to bytes
    problem : str or None
        What is missing, foreign, linked or too large; then nothing was read.

    Raises
    ------
    BundleError
        If a file cannot be read.
    """
    try:
        found = sorted(path.name for path in folder.iterdir())
        if found != sorted(LARGEST_SIZES):
            missing = sorted(set(LARGEST_SIZES) - set(found))
            foreign = sorted(set(found) - set(LARGEST_SIZES))
            parts = [f"missing {', '.join(missing)}"] if missing else []
            parts += [f"unexpected {', '.join(foreign)}"] if foreign else []
            return {}, "; ".join(parts)
        files: dict[str, bytes] = {}
        for name, largest in LARGEST_SIZES.items():
            path = folder / name
            if path.is_symlink() or not path.is_file():
                return {}, f"{name} is not a plain file"
            with path.open("rb") as stream:
                files[name] = stream.read(largest + 1)
            if len(files[name]) > largest:
                return {}, f"{name} is larger than {largest} bytes"
    except OSError as error:
        raise BundleError(
            f"cannot be read: {error.strerror}",
            where=folder,
            remedy="check the permissions of the bundle",
        ) from None
    return files, None
