"""Writing files so that nobody ever sees half of one."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from learnclosure.errors import OutputError


def _refusal(path: Path, error: OSError) -> OutputError:
    return OutputError(
        f"cannot be written: {error.strerror or error}",
        where=path,
        remedy="choose a folder you may write to, with space left",
    )


def prepare_folder(folder: Path) -> None:
    """Create a folder and its parents if missing.

    Parameters
    ----------
    folder : Path

    Raises
    ------
    OutputError
        If it cannot be created or written to.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise _refusal(folder, error) from None
    if not os.access(folder, os.W_OK):
        raise OutputError(
            "is not writable", where=folder, remedy="choose a folder you may write to"
        )


@contextmanager
def atomic_path(path: Path) -> Iterator[Path]:
    """Give a temporary sibling to write to; it takes the final name only on success.

    Parameters
    ----------
    path : Path
        The final file. Its folder is created if missing.

    Yields
    ------
    Path
        A temporary path in the same folder, removed again if the block fails.

    Raises
    ------
    OutputError
        If the folder or the file cannot be written.
    """
    prepare_folder(path.parent)
    temporary = path.with_name(f".{path.name}.{os.getpid()}.partial")
    try:
        yield temporary
        temporary.replace(path)
    except OSError as error:
        raise _refusal(path, error) from error
    finally:
        temporary.unlink(missing_ok=True)


@contextmanager
def atomic_folder(path: Path) -> Iterator[Path]:
    """Give a temporary sibling folder to fill; it replaces the final one only on success.

    Parameters
    ----------
    path : Path
        The final folder. What stands there is replaced as a whole.

    Yields
    ------
    Path
        An empty temporary folder beside it, removed again if the block fails.

    Raises
    ------
    OutputError
        If the folder cannot be written.
    """
    prepare_folder(path.parent)
    temporary = Path(tempfile.mkdtemp(prefix=f".{path.name}.", dir=path.parent))
    temporary.chmod(0o755)
    try:
        yield temporary
        if path.exists():
            shutil.rmtree(path)
        temporary.replace(path)
    except OSError as error:
        raise _refusal(path, error) from error
    finally:
        shutil.rmtree(temporary, ignore_errors=True)
