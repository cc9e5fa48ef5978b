"""The lock that keeps a run to one writer."""

from __future__ import annotations

import fcntl
import os
from pathlib import Path

from daq.errors import StorageError

LOCK = "writer.lock"


def lock_run(folder: Path) -> int:
    """Return the open lock file of a run folder; closing it, or dying, lets the lock go.

    Raises
    ------
    StorageError
        At once, when another process (or another archive of this one) holds it.
    """
    handle = os.open(folder / LOCK, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        os.close(handle)
        raise StorageError(
            "another process writes this run",
            where=str(folder),
            remedy="Wait until it has ended, or end it; two writers are never allowed",
        ) from None
    return handle


def is_written(folder: Path) -> bool:
    """Return whether a process holds a run as its writer: somebody carries it out."""
    try:
        handle = os.open(folder / LOCK, os.O_RDONLY | os.O_CLOEXEC)
    except OSError:
        return False
    try:
        fcntl.flock(handle, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except BlockingIOError:
        return True
    finally:
        os.close(handle)
    return False
