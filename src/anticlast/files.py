"""Files that appear whole or not at all: written beside their place, flushed to disk, then renamed over it.

A rename within one folder is atomic on the file systems of Linux, macOS and Windows (``os.replace``), so whoever looks under
the final name sees the old file, the new one, or none: never half of one.
"""

from __future__ import annotations

import contextlib
import os
import tempfile
from collections.abc import Iterator
from pathlib import Path
from typing import IO

from anticlast.errors import CannotWrite


def _reason(error: OSError) -> str:
    return error.strerror or type(error).__name__


@contextlib.contextmanager
def beside(path: Path, *, keep: bool = False, text: bool = True) -> Iterator[tuple[IO[str], Path]]:
    r"""Open a temporary file in the folder of ``path`` for writing; on success rename it to ``path``.

    Parameters
    ----------
    path : Path
        Final name.
    keep : bool
        Leave the finished file under its temporary name instead of renaming it; the caller renames or removes it.
    text : bool
        ASCII text with ``\n`` line ends when true, else a binary stream.

    Yields
    ------
    stream, temporary : file object, Path

    Raises
    ------
    CannotWrite
        When the folder is missing or not writable, or the disk is full. The temporary file is removed.
    """
    temporary = ""
    try:
        handle, temporary = tempfile.mkstemp(prefix=f".{path.name}.", suffix=".part", dir=path.parent)
        mode = {"mode": "w", "encoding": "utf-8", "newline": "\n"} if text else {"mode": "wb"}
        with os.fdopen(handle, **mode) as stream:  # type: ignore[call-overload]
            yield stream, Path(temporary)
            stream.flush()
            os.fsync(stream.fileno())
        os.chmod(temporary, 0o644)
        if not keep:
            os.replace(temporary, path)
    except OSError as error:
        discard(Path(temporary))
        raise CannotWrite(path, _reason(error)) from error
    except BaseException:
        discard(Path(temporary))
        raise


def write_text(path: Path, text: str) -> None:
    """Write a text file whole or not at all.

    Raises
    ------
    CannotWrite
        When the file cannot be written; the old content of ``path`` stands.
    """
    with beside(path) as (stream, _):
        stream.write(text)


def rename(temporary: Path, path: Path) -> None:
    """Give a finished temporary file its final name.

    Raises
    ------
    CannotWrite
        When the rename fails; the temporary file is removed.
    """
    try:
        os.replace(temporary, path)
    except OSError as error:
        discard(temporary)
        raise CannotWrite(path, _reason(error)) from error


def discard(path: Path) -> None:
    """Remove a file if it exists, quietly."""
    if path.name:
        with contextlib.suppress(OSError):
            path.unlink()


def folder(path: Path) -> Path:
    """Make a folder with its parents if it does not exist.

    Raises
    ------
    CannotWrite
        When it cannot be made, or a file stands in its place.
    """
    try:
        path.mkdir(parents=True, exist_ok=True)
        probe, name = tempfile.mkstemp(prefix=".anticlast.", dir=path)
        os.close(probe)
        os.unlink(name)
    except OSError as error:
        raise CannotWrite(path, _reason(error)) from error
    return path
