"""The page's feed: `live.json`, replaced whole, so that a reader never sees half of it."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import orjson

from daq.storage.trouble import rim

FEED = "live.json"


def write_feed(folder: Path, feed: Mapping[str, Any]) -> None:
    """Replace the feed of a run; NaN becomes null. It is for the page only, so it is not made durable."""
    passing = folder / f"{FEED}.partial"
    with rim(folder / FEED):
        passing.write_bytes(orjson.dumps(dict(feed), option=orjson.OPT_SERIALIZE_NUMPY))
        passing.replace(folder / FEED)


def read_feed(folder: Path) -> dict[str, Any] | None:
    """Return the feed of a run, or None where it has none that can be read."""
    try:
        feed: dict[str, Any] = orjson.loads((folder / FEED).read_bytes())
    except (OSError, ValueError):
        return None
    return feed
