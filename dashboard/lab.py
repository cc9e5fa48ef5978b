"""Runs of a lab as the page finds them on disk."""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path
from typing import Any

from daq.errors import StorageError
from daq.storage.feed import FEED, read_feed
from daq.storage.lab import runs


def run_names(lab: Path) -> list[str]:
    """Return the names of all runs that have a feed, the one written last at the end.

    The folder's own date will not do: a rehearsal carries that of its virtual clock.
    """
    written = {folder.name: _written_ns(folder) for folder in runs(lab)}
    return sorted((name for name in written if written[name] >= 0), key=lambda name: (written[name], name))


def stamp(lab: Path, run: str) -> str:
    """Return a text that changes whenever the feed of a run is written anew."""
    return f"{run} {_written_ns(lab / 'runs' / run)}"


@lru_cache(maxsize=4)
def read(lab: Path, run: str, stamp: str) -> dict[str, Any]:
    """Return the feed of a run as it is at this stamp.

    Raises
    ------
    StorageError
        For a feed that is not JSON, or of another format.
    """
    path = lab / "runs" / run / FEED
    feed = read_feed(path.parent)
    if feed is None:
        raise StorageError("the feed cannot be read", where=str(path), remedy="Look at the run's log")
    if feed.get("format") != 1:
        raise StorageError(
            "the feed has another format", where=str(path), remedy="Use the program that wrote it"
        )
    return feed


def _written_ns(folder: Path) -> int:
    try:
        return (folder / FEED).stat().st_mtime_ns
    except OSError:
        return -1
