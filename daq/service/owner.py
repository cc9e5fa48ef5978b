"""One service a lab: a lock file that names its holder."""

from __future__ import annotations

import fcntl
import json
import os
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from daq.errors import StorageError
from daq.service.requests import utc_now

LOCK = "service.lock"
LOOK_S = 1.0


@contextmanager
def owned(lab: Path) -> Iterator[None]:
    """Own a lab while its service runs; the lock goes with the process, however it ends.

    Raises
    ------
    StorageError
        When another service owns the lab, or the folder cannot be written.
    """
    try:
        lab.mkdir(parents=True, exist_ok=True)
        handle = os.open(lab / LOCK, os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o644)
    except OSError as error:
        reason = (error.strerror or "cannot be written").lower()
        raise StorageError(reason, where=str(lab), remedy="Choose another lab folder") from error
    try:
        _take(handle, lab)
        yield
    finally:
        os.close(handle)


def refuse_owned(lab: Path) -> None:
    """Refuse to start a run by hand in a lab that a service owns.

    Raises
    ------
    StorageError
        With the name of the holder.
    """
    try:
        handle = os.open(lab / LOCK, os.O_RDONLY | os.O_CLOEXEC)
    except OSError:
        return
    try:
        fcntl.flock(handle, fcntl.LOCK_SH | fcntl.LOCK_NB)
    except BlockingIOError:
        raise StorageError(
            f"a service owns this lab: {_holder(handle)}",
            where=str(lab),
            remedy="Book the run there with `tercet book`, end the service first, or use another --into",
        ) from None
    finally:
        os.close(handle)


def _take(handle: int, lab: Path) -> None:
    """Take the lock; whoever only looks at it (`refuse_owned`) holds it for a moment, which is waited out."""
    until_s = time.monotonic() + LOOK_S
    while not _taken(handle):
        if time.monotonic() > until_s:
            raise StorageError(
                f"a service owns this lab already: {_holder(handle)}",
                where=str(lab),
                remedy="Use that one, or end it first",
            )
        time.sleep(0.01)
    os.ftruncate(handle, 0)
    os.pwrite(handle, json.dumps({"pid": os.getpid(), "since": utc_now()}).encode(), 0)


def _taken(handle: int) -> bool:
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except BlockingIOError:
        return False
    return True


def _holder(handle: int) -> str:
    try:
        found = json.loads(os.pread(handle, 200, 0))
        return f"process {found['pid']}, since {found['since']}"
    except (ValueError, KeyError):
        return "it has not said which"
