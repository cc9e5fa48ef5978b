"""Errors of the system, of SQLite and of Zarr, translated once, at the rim: what, where, and the remedy."""

from __future__ import annotations

import errno
import sqlite3
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from daq.errors import StorageError

# What the system, SQLite, Zarr and its codecs raise.
LIBRARY_ERRORS = (OSError, sqlite3.Error, ValueError, KeyError, RuntimeError)

_FULL = (
    "the disk is full",
    "Free space on it: every visit acknowledged so far is safe, and the run goes on once there is room",
)
_READ_ONLY = ("the folder cannot be written", "Check its owner and that its disk is not mounted read-only")
_NO_FOLDER = ("a part of this path is a file, not a folder", "Choose another lab folder")
_DAMAGED = (
    "the journal is damaged",
    "Keep a copy of the folder; `tercet verify` says which visits are still good",
)
_BY_ERRNO = {
    errno.ENOSPC: _FULL,
    errno.EDQUOT: _FULL,
    errno.EROFS: _READ_ONLY,
    errno.EACCES: _READ_ONLY,
    errno.EPERM: _READ_ONLY,
    errno.ENOTDIR: _NO_FOLDER,
    errno.EEXIST: ("it exists already", "Choose another folder, or go on with `--resume`"),
}
_BY_NAME = {
    "SQLITE_FULL": _FULL,
    "SQLITE_READONLY": _READ_ONLY,
    "SQLITE_CORRUPT": _DAMAGED,
    "SQLITE_NOTADB": _DAMAGED,
    "SQLITE_CANTOPEN": (
        "the journal cannot be opened",
        "On a read-only disk copy the whole folder to one that can be written, and read the copy",
    ),
}
_OTHER = "Check the disk; `tercet verify` says which visits are still good"


def stored(error: Exception, where: Path | str) -> StorageError:
    """Return the StorageError for an error of the system, of SQLite or of Zarr."""
    what, remedy = _known(error) or (f"the archive cannot be used ({error})", _OTHER)
    return StorageError(what, where=str(where), remedy=remedy)


@contextmanager
def rim(where: Path | str) -> Iterator[None]:
    """Turn an error of the system, of SQLite or of Zarr inside the block into a StorageError."""
    try:
        yield
    except LIBRARY_ERRORS as error:
        raise stored(error, where) from error


def _known(error: Exception) -> tuple[str, str] | None:
    if isinstance(error, sqlite3.Error):
        name = getattr(error, "sqlite_errorname", "")
        return next((words for key, words in _BY_NAME.items() if name.startswith(key)), None)
    return _BY_ERRNO.get(error.errno or 0) if isinstance(error, OSError) else None
