"""A bundle as one ZIP file: the same bytes for the same files, and nothing extracted."""

from __future__ import annotations

import io
import stat
import zipfile
import zlib
from collections.abc import Mapping
from pathlib import Path

from learnclosure.atomic import atomic_path
from learnclosure.errors import BundleError
from learnclosure.export.checks import RefusalError
from learnclosure.export.layout import ALL_SIZES, check_names

EARLIEST = (1980, 1, 1, 0, 0, 0)
"""The first time the format can hold."""
PLAIN_FILE = stat.S_IFREG | 0o644
UNIX = 3
END_SIZE = 22
"""Bytes of the record at the end of an archive (PKWARE, APPNOTE.TXT, section 4.3.16)."""
LARGEST_DIRECTORY = 1 << 14
ENCRYPTED = 0x1


def archive_bytes(files: Mapping[str, bytes]) -> bytes:
    """Return files as an archive.

    Parameters
    ----------
    files : mapping of str to bytes

    Returns
    -------
    bytes
        A ZIP file with sorted entries, all of one time and permission and stored as they
        are, since compressors differ in what they make of the same bytes.
    """
    stream = io.BytesIO()
    with zipfile.ZipFile(stream, "w", zipfile.ZIP_STORED) as archive:
        for name in sorted(files):
            entry = zipfile.ZipInfo(name, EARLIEST)
            entry.create_system = UNIX
            entry.external_attr = PLAIN_FILE << 16
            archive.writestr(entry, files[name])
    return stream.getvalue()


def write_archive(files: Mapping[str, bytes], target: Path) -> None:
    """Write files as an archive.

    Parameters
    ----------
    files : mapping of str to bytes
    target : Path

    Raises
    ------
    OutputError
        If the target cannot be written.
    """
    with atomic_path(target) as temporary:
        temporary.write_bytes(archive_bytes(files))


def read_archive(path: Path) -> dict[str, bytes]:
    """Read the files of a bundle from an archive, without extracting any.

    Parameters
    ----------
    path : Path

    Returns
    -------
    dict of str to bytes

    Raises
    ------
    RefusalError
        If the archive is malformed, an entry is no plain file at the top of it, or a file
        is missing, foreign or too large.
    BundleError
        If the archive cannot be read.
    """
    largest = sum(ALL_SIZES.values())
    try:
        with path.open("rb") as stream:
            content = stream.read(largest + 1)
    except OSError as error:
        raise BundleError(
            f"cannot be read: {error.strerror}",
            where=path,
            remedy="check the permissions of the bundle",
        ) from None
    if len(content) > largest:
        raise RefusalError("file-size", f"the archive is larger than {largest} bytes")
    _check_end(content)
    try:
        with zipfile.ZipFile(io.BytesIO(content)) as archive:
            entries = archive.infolist()
            for entry in entries:
                _check_entry(entry)
            check_names(entry.filename for entry in entries)
            if len({entry.filename for entry in entries}) < len(entries):
                raise RefusalError("archive-entry", "two entries share a name")
            return {entry.filename: _read_entry(archive, entry) for entry in entries}
    except (zipfile.BadZipFile, zlib.error, EOFError, ValueError, NotImplementedError) as error:
        raise RefusalError("archive-format", f"not a sound ZIP file: {error}") from None


def _check_end(content: bytes) -> None:
    """Bound the directory of an archive before it is read."""
    end = content[-END_SIZE:]
    if len(end) < END_SIZE or end[:4] != b"PK\x05\x06" or end[-2:] != b"\0\0":
        raise RefusalError("archive-format", "not a ZIP file without comment")
    if content[-END_SIZE - 20 : -END_SIZE].startswith(b"PK\x06\x07"):
        raise RefusalError("archive-format", "a ZIP file of more than 4 GB")
    entries = int.from_bytes(end[10:12], "little")
    size = int.from_bytes(end[12:16], "little")
    if entries > len(ALL_SIZES) or size > LARGEST_DIRECTORY:
        raise RefusalError("archive-format", f"{entries} entries in {size} bytes of directory")


def _check_entry(entry: zipfile.ZipInfo) -> None:
    name = entry.filename
    if entry.orig_filename != name or not name or set(name) & set("/\\:\0") or name in {".", ".."}:
        raise RefusalError("archive-path", f"an entry {entry.orig_filename!r}")
    kind = stat.S_IFMT(entry.external_attr >> 16)
    if entry.is_dir() or kind not in {0, stat.S_IFREG}:
        raise RefusalError("archive-entry", f"{name} is not a plain file")
    if entry.flag_bits & ENCRYPTED:
        raise RefusalError("archive-entry", f"{name} is encrypted")
    if entry.compress_type not in {zipfile.ZIP_STORED, zipfile.ZIP_DEFLATED}:
        raise RefusalError("archive-entry", f"{name} is packed by method {entry.compress_type}")
    largest = ALL_SIZES.get(name)
    if largest is not None and entry.file_size > largest:
        raise RefusalError("file-size", f"{name} is larger than {largest} bytes")


def _read_entry(archive: zipfile.ZipFile, entry: zipfile.ZipInfo) -> bytes:
    largest = ALL_SIZES[entry.filename]
    with archive.open(entry) as stream:
        content = stream.read(largest + 1)
    # A directory may understate what an entry unpacks to.
    if len(content) > largest:
        raise RefusalError("file-size", f"{entry.filename} unpacks to more than {largest} bytes")
    return content
