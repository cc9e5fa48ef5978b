"""Runs of a lab as the page finds them on disk."""

from __future__ import annotations

from functools import lru_cache
from pathlib import Path
from typing import Any

from daq.errors import StorageError
from daq.storage.feed import FEED, read_feed
from daq.storage.lab import runs

_KEYS = {
    *(
        "run",
        "title",
        "state",
        "kind",
        "clock",
        "slits",
        "blinding",
        "ended",
        "visit",
        "kappa",
        "history",
        "rate",
    ),
    *("started_utc", "run_s", "updated_utc", "written_utc", "ends_utc", "sensors", "warnings", "log"),
    *("positions_mm", "openings", "rates_hz", "epsilon_hz", "epsilon_se_hz"),
}


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
    folder = lab / "runs" / run
    feed = read_feed(folder)
    wrong = _wrong(feed)
    if wrong or feed is None:
        raise StorageError(wrong, where=str(folder / FEED), remedy="Look at the log of the run")
    return feed


def _wrong(feed: Any) -> str:
    if not isinstance(feed, dict):
        return "the feed cannot be read"
    if feed.get("format") != 1:
        return "the feed has a format that this page does not know"
    missing = sorted(_KEYS - set(feed))
    return f"the feed lacks {', '.join(missing)}" if missing else ""


def _written_ns(folder: Path) -> int:
    try:
        return (folder / FEED).stat().st_mtime_ns
    except OSError:
        return -1
