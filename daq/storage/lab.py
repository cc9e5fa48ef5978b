"""The lab folder: where runs stand and what their folders are called."""

from __future__ import annotations

import re
from datetime import UTC, datetime
from itertools import count
from pathlib import Path

from daq.errors import StorageError

_RUN = re.compile(r"\d{8}T\d{6}Z-.+")


def run_folder_name(utc_ns: int, name: str) -> str:
    """Return the name of a run's folder, such as "20261201T063700Z-lantern"."""
    return f"{datetime.fromtimestamp(utc_ns // 1_000_000_000, UTC):%Y%m%dT%H%M%SZ}-{name}"


def new_run_folder(lab: Path, utc_ns: int, name: str) -> Path:
    """Return a folder for a new run that is not taken yet; a second run of the same second gets "-2"."""
    first = lab / "runs" / run_folder_name(utc_ns, name)
    if not first.exists():
        return first
    others = (first.with_name(f"{first.name}-{number}") for number in count(2))
    return next(folder for folder in others if not folder.exists())


def there(lab: Path) -> Path:
    """Return a lab folder that is to be looked at; raises StorageError where there is none."""
    if not lab.is_dir():
        raise StorageError("there is no such lab", where=str(lab), remedy="Check the path")
    return lab


def runs(lab: Path) -> list[Path]:
    """Return the run folders of a lab, newest last."""
    folder = lab / "runs"
    if not folder.is_dir():
        return []
    return sorted(path for path in folder.iterdir() if path.is_dir() and _RUN.fullmatch(path.name))
