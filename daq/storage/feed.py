"""The page's feeds, `live.json` of a run and `desk.json` of a lab: replaced whole, never seen half."""

from __future__ import annotations

from collections.abc import Mapping
from pathlib import Path
from typing import Any

import orjson

from daq.storage.trouble import rim

FEED, DESK = "live.json", "desk.json"


def write_feed(folder: Path, feed: Mapping[str, Any], name: str = FEED) -> None:
    """Replace a feed; NaN becomes null. It is for the page only, so it is not made durable."""
    passing = folder / f"{name}.partial"
    with rim(folder / name):
        passing.write_bytes(orjson.dumps(dict(feed), option=orjson.OPT_SERIALIZE_NUMPY))
        passing.replace(folder / name)


def replace_text(path: Path, text: str) -> None:
    """Replace a text file, so that a reader never sees half of it."""
    passing = path.with_name(f"{path.name}.partial")
    with rim(path):
        passing.write_text(text)
        passing.replace(path)


def read_feed(folder: Path, name: str = FEED) -> dict[str, Any] | None:
    """Return the feed of a run or lab, or None where there is none that can be read."""
    try:
        feed: dict[str, Any] = orjson.loads((folder / name).read_bytes())
    except (OSError, ValueError):
        return None
    return feed
