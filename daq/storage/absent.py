"""Folders in which no run can be read: what they are instead, and what to do; none is ever to be removed."""

from __future__ import annotations

import json
from pathlib import Path

from daq.errors import StorageError
from daq.storage.lab import runs
from daq.storage.lab_book import BOOK
from daq.storage.layout import RECORD, ZARR

ROOT = f"{ZARR}/zarr.json"
KEEP = "Keep the folder as it is; `tercet verify` says which of its files are still good"


def no_run(folder: Path) -> StorageError:
    """Return the error for a folder without a journal, whose Zarr group does not say that it is finished."""
    if not folder.is_dir():
        return _error(folder, "there is no such run", "Check the path")
    lab = folder.parent if folder.name == "runs" else folder
    if (lab / BOOK).exists() or (lab / "runs").is_dir():
        newest = runs(lab)[-1:]
        return _error(
            folder, "this is a lab, not a run", f"Name one of its runs: {newest[0] if newest else 'none yet'}"
        )
    if _holds_visits(folder):
        return _headless(folder)
    if (folder / ZARR).exists() or (folder / RECORD).exists() or any(folder.glob("*.toml")):
        return _error(
            folder,
            "the run was broken off while its folder was being made, so it holds no visit",
            "Start the run again: it gets a folder of its own, and this one may stay",
        )
    return _error(folder, "this folder holds no run", "Name a run, LAB/runs/NAME")


def _holds_visits(folder: Path) -> bool:
    """Return whether any visit was ever sealed here: then the folder holds data, whatever else it lacks."""
    chunks = folder / ZARR / "visit" / "c"
    return chunks.is_dir() and any(chunks.iterdir())


def _headless(folder: Path) -> StorageError:
    try:
        json.loads((folder / ROOT).read_bytes())
    except FileNotFoundError:
        what = f"{ROOT} is missing, and its visits are still there"
    except (OSError, ValueError):
        what = f"{ROOT} is damaged, and its visits are still there"
    else:
        what = "the journal is missing although the run is not finished; the visits sealed before are there"
    return _error(folder, what, KEEP)


def _error(folder: Path, what: str, remedy: str) -> StorageError:
    return StorageError(what, where=str(folder), remedy=remedy)
