"""The run's log: what happened, one JSON object a line."""

from __future__ import annotations

import os
from pathlib import Path
from typing import Any

import orjson

from daq.errors import StorageError
from daq.storage.trouble import rim

LOG = "log.jsonl"


class RunLog:
    """Appends to `log.jsonl` of a run folder, which must exist."""

    def __init__(self, folder: Path) -> None:
        self._path = folder / LOG

    def append(self, event: str, **fields: Any) -> None:
        """Append one line; what a crash left of a line before it is closed off first."""
        line = orjson.dumps({"event": event, **fields}, option=orjson.OPT_SERIALIZE_NUMPY) + b"\n"
        with rim(self._path):
            handle = os.open(self._path, os.O_RDWR | os.O_APPEND | os.O_CREAT | os.O_CLOEXEC, 0o644)
            try:
                size = os.fstat(handle).st_size
                torn = size > 0 and os.pread(handle, 1, size - 1) != b"\n"
                os.write(handle, b"\n" + line if torn else line)
            finally:
                os.close(handle)


def read_log(folder: Path) -> list[dict[str, Any]]:
    """Return the lines of a run's log, oldest first; a line that a crash tore is left out."""
    path = folder / LOG
    if not path.exists():
        if not folder.is_dir():
            raise StorageError("there is no such run", where=str(folder), remedy="Check the path")
        return []
    with rim(path):
        lines = path.read_bytes().splitlines()
    return [entry for line in lines if (entry := _entry(line)) is not None]


def _entry(line: bytes) -> dict[str, Any] | None:
    try:
        entry = orjson.loads(line)
    except ValueError:
        return None
    return entry if isinstance(entry, dict) else None
