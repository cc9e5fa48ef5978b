"""What a run says of itself, from its archive alone."""

from __future__ import annotations

from pathlib import Path
from typing import Any

from daq.report import summary
from daq.service.blind import at_hand
from daq.storage.digest import digest, gate_digest
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
    return summary(folder, visits, {"digest": digest(visits), "gate_digest": gate_digest(visits)})
