"""What a bundle consists of: file names, sizes a receiver accepts, sums."""

from __future__ import annotations

import hashlib
import os
import stat
from collections.abc import Iterable, Mapping
from pathlib import Path

from learnclosure.errors import BundleError
from learnclosure.export.checks import RefusalError

SCHEMA = "1"

GRAPH_FILE = "closure.onnx"
SINGLE_FILE = "closure_float32.onnx"
MANIFEST_FILE = "manifest.json"
REFERENCE_FILE = "reference.nc"
CARD_FILE = "MODEL_CARD.md"
SUMS_FILE = "SHA256SUMS"
SIGNATURE_FILE = "SHA256SUMS.sig"

LARGEST_SIZES = {
    CARD_FILE: 1 << 20,
    SUMS_FILE: 4096,
    GRAPH_FILE: 32 << 20,
    MANIFEST_FILE: 4 << 20,
    REFERENCE_FILE: 64 << 20,
}
"""Every file a bundle must have and the most bytes a receiver reads of it."""
OPTIONAL_SIZES = {SINGLE_FILE: 32 << 20, SIGNATURE_FILE: 1 << 16}
"""Files a bundle may have as well."""
ALL_SIZES = {**LARGEST_SIZES, **OPTIONAL_SIZES}
UNSUMMED = (SUMS_FILE, SIGNATURE_FILE)
"""Files without a line in the sums: the sums themselves, and what signs them."""


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
        One line for each file but the sums themselves and their signature, sorted by name.
    """
    names = sorted(name for name in files if name not in UNSUMMED)
    return "".join(f"{digest(files[name])}  {name}\n" for name in names).encode()


def check_names(found: Iterable[str]) -> None:
    """Insist on all required files and none but the optional ones.

    Parameters
    ----------
    found : iterable of str
        Names of files.

    Raises
    ------
    RefusalError
    """
    names = set(found)
    missing = sorted(set(LARGEST_SIZES) - names)
    foreign = sorted(names - set(ALL_SIZES))
    parts = [f"missing {', '.join(missing)}"] if missing else []
    parts += [f"unexpected {', '.join(foreign[:5])}"] if foreign else []
    if parts:
        raise RefusalError("file-list", "; ".join(parts))


def require_bundle(place: Path) -> None:
    """Insist that a path is a bundle at all.

    Parameters
    ----------
    place : Path
        A folder with a manifest, or a file, which is taken for an archive.

    Raises
    ------
    BundleError
        If it is neither.
    """
    remedy = "give the folder or archive that 'learnclosure export' wrote"
    if place.is_file():
        return
    if not place.is_dir():
        raise BundleError(
            "is not a folder or archive", where=place, expected="a bundle", remedy=remedy
        )
    if not (place / MANIFEST_FILE).is_file():
        raise BundleError(
            "is not a bundle", where=place, expected=f"a file {MANIFEST_FILE}", remedy=remedy
        )


def read_folder(folder: Path) -> dict[str, bytes]:
    """Read the files of a bundle once, within the sizes a receiver accepts.

    Parameters
    ----------
    folder : Path

    Returns
    -------
    dict of str to bytes

    Raises
    ------
    RefusalError
        If a file is missing, foreign, not a plain file or too large.
    BundleError
        If a file cannot be read.
    """
    try:
        with os.scandir(folder) as entries:
            # One more than can be right is enough to know that something is wrong.
            found = [
                entry.name for _, entry in zip(range(len(ALL_SIZES) + 1), entries, strict=False)
            ]
        check_names(found)
        return {name: _read_plain(folder / name, ALL_SIZES[name]) for name in sorted(found)}
    except OSError as error:
        raise BundleError(
            f"cannot be read: {error.strerror}",
            where=folder,
            remedy="check the permissions of the bundle",
        ) from None


def _read_plain(path: Path, largest: int) -> bytes:
    if path.is_symlink():
        raise RefusalError("file-kind", f"{path.name} is not a plain file")
    # A pipe would be waited for without the first flag; a link made meanwhile be followed
    # without the second.
    handle = os.open(path, os.O_RDONLY | os.O_NONBLOCK | os.O_NOFOLLOW)
    with os.fdopen(handle, "rb") as stream:
        if not stat.S_ISREG(os.fstat(handle).st_mode):
            raise RefusalError("file-kind", f"{path.name} is not a plain file")
        content = stream.read(largest + 1)
    if len(content) > largest:
        raise RefusalError("file-size", f"{path.name} is larger than {largest} bytes")
    return content
