"""Nights that are kept: what was worked out of a run once, so that its visits need not be read again."""

from __future__ import annotations

import hashlib
import json
import os
import sys
from collections.abc import Mapping
from functools import partial
from pathlib import Path
from typing import Any

from daq.scale.job import code_of
from daq.scale.nights import Night
from daq.storage.disk import Disk, write_durably

# What decides the figures of a run: another page or another command leaves them as they are.
ESTIMATOR = ("daq.openings", "daq.records", "daq.estimate", "daq.storage", "daq.scale.nights")
estimator_version = partial(code_of, *ESTIMATOR)
ENDING = ".night"
_HASH_BYTES = 32


def usual_folder() -> Path:
    """Return where nights are kept unless told otherwise: the user's cache."""
    if sys.platform == "win32":
        base = Path(os.environ.get("LOCALAPPDATA") or Path.home() / "AppData" / "Local")
    else:
        base = Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache")
    return base / "tercet" / "nights"


class Kept:
    """Holds a folder of nights, a file each; never a run's own folder.

    A file is named after the digest of the run, and after everything else that decides its figures: its meta
    data, its blinding, and the version of the estimator. One that is damaged, or of another version, is as
    good as none, and gives way to the next. Where the folder cannot be written, `trouble` says why.
    """

    def __init__(self, folder: Path, version: str | None = None) -> None:
        self.folder = folder
        self.trouble = ""
        self._version = estimator_version() if version is None else version

    def get(self, facts: Mapping[str, Any]) -> Night | None:
        """Return the night that is kept of a run with such facts; a run without any is not known."""
        if not facts:
            return None
        try:
            data = self._path(facts).read_bytes()
        except OSError:
            return None
        told, night = data[:_HASH_BYTES], data[_HASH_BYTES:]
        return Night.from_bytes(night) if hashlib.sha256(night).digest() == told else None

    def put(self, facts: Mapping[str, Any], night: bytes) -> None:
        """Keep a night, as bytes, in place of any older one of the same run."""
        if not facts:
            return
        path = self._path(facts)
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            for older in self.folder.glob(f"{_run(facts)}-*{ENDING}"):
                older.unlink(missing_ok=True)
            write_durably(Disk(), path, hashlib.sha256(night).digest() + night)
        except OSError as error:
            self.trouble = (error.strerror or str(error)).lower()

    def _path(self, facts: Mapping[str, Any]) -> Path:
        said = json.dumps([dict(facts), self._version], sort_keys=True, default=str)
        return self.folder / f"{_run(facts)}-{hashlib.sha256(said.encode()).hexdigest()[:32]}{ENDING}"


def _run(facts: Mapping[str, Any]) -> str:
    return str(facts.get("digest"))[:32]
