"""The disk as the archive uses it: a file is there whole and durable, or not at all."""

from __future__ import annotations

import os
from pathlib import Path


class Disk:
    """Durable writes; a test hands over a disk that forgets what was not synced."""

    def write(self, path: Path, data: bytes | memoryview) -> None:
        """Write a file and make its contents durable (its name is durable after `sync_dir`)."""
        with path.open("wb") as file:
            file.write(data)
            file.flush()
            os.fdatasync(file.fileno())

    def replace(self, source: Path, target: Path) -> None:
        """Give a file its final name in one step."""
        source.replace(target)

    def sync_dir(self, folder: Path) -> None:
        """Make the names in a folder durable."""
        handle = os.open(folder, os.O_RDONLY | os.O_DIRECTORY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)

    def step(self, name: str) -> None:
        """Say that a step of the order of operations is done: a test cuts the power here."""


def write_durably(disk: Disk, path: Path, data: bytes | memoryview) -> None:
    """Write a file under a passing name, then give it its own: never half a file under the right name."""
    passing = path.with_name(f"{path.name}.partial")
    disk.write(passing, data)
    disk.replace(passing, path)
