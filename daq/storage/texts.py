"""Verbatim copies of what the run was told: description, rig and dialects, with their SHA-256."""

from __future__ import annotations

import hashlib
from collections.abc import Mapping
from pathlib import Path, PurePosixPath

from daq.errors import StorageError
from daq.storage.disk import Disk, write_durably


def write_texts(folder: Path, texts: Mapping[str, bytes], disk: Disk) -> dict[str, str]:
    """Write the copies durably and return file name -> SHA-256 in hex."""
    for name, data in texts.items():
        path = folder / _inside(name)
        path.parent.mkdir(parents=True, exist_ok=True)
        write_durably(disk, path, data)
        disk.sync_dir(path.parent)
    return {name: hashlib.sha256(data).hexdigest() for name, data in texts.items()}


def changed_texts(folder: Path, digests: Mapping[str, str]) -> list[str]:
    """Return the names of the copies that are missing or no longer what was written."""
    return [name for name, digest in digests.items() if _digest(folder / _inside(name)) != digest]


def _inside(name: str) -> str:
    path = PurePosixPath(name)
    if path.is_absolute() or ".." in path.parts or not path.parts:
        raise StorageError(f"{name!r} does not name a file inside the run folder")
    return str(path)


def _digest(path: Path) -> str:
    try:
        return hashlib.sha256(path.read_bytes()).hexdigest()
    except OSError:
        return ""
