"""Locks: one program at a time talks to a device, whatever the kind of link.

The locks that libraries offer are ignored on some links and inherited by children on others; hence a lock
file of our own for each address. The operating system frees it when its holder dies, however it dies.
"""

from __future__ import annotations

import hashlib
import os
import re
import socket
import sys
import tempfile
import threading
from datetime import UTC, datetime
from pathlib import Path

from daq.errors import DeviceError

FOLDER = "tercet-devices"

_held = set[str]()  # by this process: the system's lock lets the same process in twice
_guard = threading.Lock()


class Hold:
    """A device address that is ours until `release`."""

    def __init__(self, key: str, handle: int) -> None:
        self._key, self._handle = key, handle

    def release(self) -> None:
        """Let others have the address; doing it twice does no harm."""
        with _guard:
            if self._key in _held and self._handle >= 0:
                _held.discard(self._key)
                os.close(self._handle)
                self._handle = -1


def hold(address: str, name: str, folder: Path | None = None) -> Hold:
    """Return the hold on a device address.

    Parameters
    ----------
    address
        As in a rig file; two ways to write one place are one address.
    name
        The device in the rig, for messages.
    folder
        Where the lock files are, one folder for every program of this computer by default.

    Raises
    ------
    DeviceError
        "refused", with who holds it, when another program does or this one has it open already.
    """
    key = place_of(address)
    folder = Path(tempfile.gettempdir()) / FOLDER if folder is None else folder
    with _guard:
        if key in _held:
            raise _refusal(address, name, "this program itself, by another device of the rig")
        handle = _open(folder, key)
        if not _lock(handle):
            holder = os.pread(handle, 400, 0).decode("utf-8", "replace") if hasattr(os, "pread") else ""
            os.close(handle)
            raise _refusal(address, name, holder or "another program")
        os.ftruncate(handle, 0)
        os.write(handle, _myself(name).encode())
        _held.add(key)
        return Hold(key, handle)


def place_of(address: str) -> str:
    """Return one way to write an address: a host by its number, a serial port by its real path."""
    net = re.fullmatch(r"(?:tcp|socket|rfc2217)://(?P<host>[^:/]+):(?P<port>\d+)", address)
    if net:
        try:
            host = socket.gethostbyname(net["host"])
        except OSError:
            host = net["host"]
        return f"net:{host}:{net['port']}"
    if address.startswith("serial:"):
        return f"serial:{Path(address.removeprefix('serial:').partition('?')[0]).resolve()}"
    return address


def _open(folder: Path, key: str) -> int:
    folder.mkdir(parents=True, exist_ok=True)
    path = folder / f"{hashlib.sha256(key.encode()).hexdigest()[:24]}.lock"
    before = os.umask(0)  # whoever works at this computer may lock the device after us
    try:
        return os.open(path, os.O_RDWR | os.O_CREAT, 0o666)
    finally:
        os.umask(before)


def _lock(handle: int) -> bool:
    try:
        if sys.platform == "win32":
            import msvcrt

            msvcrt.locking(handle, msvcrt.LK_NBLCK, 1)
        else:
            import fcntl

            fcntl.lockf(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)  # unlike flock, no child inherits it
    except OSError:
        return False
    return True


def _myself(name: str) -> str:
    words = " ".join([Path(sys.argv[0]).name, *sys.argv[1:]])[:200]
    since = datetime.now(UTC).strftime("%Y-%m-%d %H:%M:%S UTC")
    return f"process {os.getpid()} ({words}), as device {name}, since {since}"


def _refusal(address: str, name: str, holder: str) -> DeviceError:
    return DeviceError(
        f"the device is in use by {holder}",
        where=f"{name} on {address}",
        remedy="End that program, or mend the address in the rig file",
        kind="refused",
    )
