"""What a run says of itself, from its archive alone."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from daq.report import summary
from daq.service.blind import at_hand
from daq.storage.digest import digest, gate_digest
from daq.storage.log import read_log
from daq.storage.reader import open_visits


def figures_of(folder: Path) -> dict[str, Any]:
    """Return the figures of a run's report; the run may be going on.

    Of a damaged run they are those of what is still good; `damaged` then holds a sentence for each damage.

    Raises
    ------
    StorageError
        When the archive cannot be read.
    """
    visits = open_visits(folder, salvage=True)
    at_hand(folder, visits.attrs)
    figures = summary(folder, visits, {"digest": digest(visits), "gate_digest": gate_digest(visits)})
    return figures | {"warnings": warnings_of(folder)}


def warnings_of(folder: Path) -> list[dict[str, Any]]:
    """Return the warnings of a run that were not cleared, as its log has them: the latest words of each."""
    standing = dict[str, dict[str, Any]]()
    for entry in read_log(folder):
        if entry["event"] in ("warning", "warning worse"):
            standing[entry["id"]] = entry
        elif entry["event"] == "warning cleared":
            standing.pop(entry["id"], None)
    return [{key: one.get(key) for key in ("id", "utc", "text", "in_doubt")} for one in standing.values()]
