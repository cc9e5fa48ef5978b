"""Tape: everything that an archive holds, in the order in which it happened, to be played again."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from daq.errors import StorageError
from daq.estimate import readings_of_dataset
from daq.itinerary import Itinerary
from daq.itinerary.archived import archived
from daq.records import Reading, Visit
from daq.sequencer import Planned
from daq.storage.digest import digest, gate_digest
from daq.storage.log import read_log
from daq.storage.reader import open_itinerary, open_visits


@dataclass(frozen=True, slots=True)
class Tape:
    """An archived run: what it is, what was planned, every reading, and before which row something failed."""

    meta: dict[str, Any]
    itinerary: Itinerary
    readings: tuple[Reading, ...]
    faults: tuple[tuple[int, int], ...]  # row that came after it, run time
    digest: str
    gate_digest: str

    def lost_before(self) -> dict[int, list[int]]:
        """Return row -> run times of the faults that came before it, oldest first."""
        found: dict[int, list[int]] = {}
        for row, at_ns in self.faults:
            if row < len(self.readings):
                found.setdefault(row, []).append(at_ns)
        return found

    def planned(self, row: int) -> Planned:
        """Return the visit, attempt and reason of a row."""
        reading = self.readings[row]
        visit = self.itinerary.visit(reading.visit) if reading.visit >= 0 else Visit(-1, 0, 0.0, 0.0)
        visit = replace(
            visit, opening=reading.opening, position_mm=reading.position_mm, dwell_s=reading.dwell_s
        )
        return visit, reading.attempt, reading.reason


def tape_of(folder: Path) -> Tape:
    """Return what an archive holds.

    Raises
    ------
    StorageError
        For a run that is damaged, newer than this program, or has no visit.
    """
    visits = open_visits(folder)
    if not visits.sizes["row"]:
        raise StorageError("the run holds no visit", where=str(folder), remedy="Replay another one")
    closed_ns = visits["gate_close_ns"].values
    faults = [int(entry["run_ns"]) for entry in read_log(folder) if entry["event"] == "fault"]
    return Tape(
        meta=dict(visits.attrs),
        itinerary=archived(open_itinerary(folder)),
        readings=tuple(_readings(visits)),
        faults=tuple((int(np.searchsorted(closed_ns, at_ns)), at_ns) for at_ns in faults),
        digest=digest(visits),
        gate_digest=gate_digest(visits),
    )


def _readings(visits: xr.Dataset) -> Iterator[Reading]:
    """Yield readings with everything that devices said."""
    meta = visits.attrs
    ends = {
        axis: np.stack([visits[f"encoder_{axis}_{edge}_mm"].values for edge in ("open", "close")], axis=1)
        for axis in meta.get("axes", ())
    }
    sensed = {
        name: (visits[f"sensor_{name}"].values, unit, visits[f"sensor_{name}_at_ns"].values)
        for name, unit in meta.get("sensors", {}).items()
    }
    reasons, repeats = (visits[name].values for name in ("reason", "repeats"))
    for row, reading in enumerate(readings_of_dataset(visits)):
        yield replace(
            reading,
            reason=int(reasons[row]),
            repeats=int(repeats[row]),
            encoder_mm={axis: (float(pair[row, 0]), float(pair[row, 1])) for axis, pair in ends.items()},
            sensors={
                name: (float(value[row]), unit, int(at_ns[row]))
                for name, (value, unit, at_ns) in sensed.items()
                if at_ns[row] >= 0
            },
        )
