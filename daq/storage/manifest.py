"""The list of what a finished run consists of: `sha256.txt`, which `sha256sum -c sha256.txt` reads too."""

from __future__ import annotations

import hashlib
from collections.abc import Iterable
from pathlib import Path

from daq.storage.disk import Disk, write_durably
from daq.storage.layout import RECORD, ZARR

MANIFEST = "sha256.txt"


def write_manifest(folder: Path, texts: Iterable[str], disk: Disk) -> None:
    """Write the SHA-256 of every file of the Zarr group, of the record and of the verbatim copies."""
    files = [
        *sorted(path for path in (folder / ZARR).rglob("*") if path.is_file()),
        *(path for name in (RECORD, *texts) if (path := folder / name).is_file()),
    ]
    lines = (f"{_sha256(path)}  {path.relative_to(folder).as_posix()}\n" for path in files)
    write_durably(disk, folder / MANIFEST, "".join(lines).encode())


def changed_files(folder: Path) -> dict[str, str]:
    """Return name -> "missing" or "changed" for every listed file that is not what it was."""
    found = {}
    for line in (folder / MANIFEST).read_text("utf-8").splitlines():
        digest, _, name = line.partition("  ")
        path = folder / name
        if not path.is_file():
            found[name] = "missing"
        elif _sha256(path) != digest:
            found[name] = "changed"
    return found


def _sha256(path: Path) -> str:
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()
