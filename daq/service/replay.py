"""Replay: an archived run fed through simulated instruments, the same sequencer, rules and estimator."""

from __future__ import annotations

import uuid
from collections.abc import Mapping
from contextlib import ExitStack
from dataclasses import dataclass, field
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from daq.description import Rig
from daq.description.device import DeviceEntry
from daq.devices.files import read_dialect
from daq.devices.registry import open_devices
from daq.errors import StorageError
from daq.estimate.blinding import OPEN
from daq.service.again import carry_out_again
from daq.service.equip import Wanted, night_of
from daq.service.extensions import open_bench
from daq.service.load import Loaded, config_dir, load_changed
from daq.service.record import settings_of
from daq.service.software import software
from daq.service.tape import Tape, tape_of
from daq.service.through import through
from daq.service.whatif import refuse_unanswerable
from daq.storage.blinding import blinding_of
from daq.storage.lab import new_run_folder
from daq.storage.run import Archive, create_run

COUNTER, STAGES = "counter", "stages"
AT_ONCE_MM_S = 1e16  # an axis of a replay is where it was before its gate opens: no nanosecond is lost
# What belongs to the run that is replayed, and not to its replay.
_ITS_OWN = (
    *("finished", "ended", "ended_utc", "results", "digest", "gate_digest", "texts_sha256"),
    *("format", "chunk", "list_mode", "id", "run"),
    *("blinding_scope", "blinding_halfwidth", "blinding_commitments", "stop"),
)


@dataclass(frozen=True, slots=True)
class WhatIf:
    """What is otherwise: keys of the description, a fault script laid over it, `times` the wall clock."""

    changes: Mapping[str, Any] = field(default_factory=dict)
    faults: Path | None = None
    times: float | None = None


def replay(source: Path, lab: Path, wanted: Wanted, what_if: WhatIf) -> tuple[Path, Tape, str]:
    """Carry out a replay of a run and return its folder, what was replayed, and how it ended.

    Raises
    ------
    StorageError
        For an archive that is damaged, or newer than this program.
    DescriptionError
        For a question that the archive cannot answer.
    """
    tape = tape_of(source)
    if blinding_of(source, tape.meta).hides:
        raise StorageError(
            "this run is blinded, and to replay it would be to look at it another time",
            where=str(source),
            remedy="Reveal it first: `tercet blind RUN --reveal`",
        )
    refuse_unanswerable(what_if.changes, tape.meta)
    loaded = load_changed(source, what_if.changes)
    loaded = loaded if what_if.faults is None else loaded.with_faults(what_if.faults)
    due = _Due()
    rig = _rig(loaded.rig, tape, due, what_if.times)
    with ExitStack() as stack:
        bench = open_bench(rig, seed=None, transport=wanted.transport, state=None, faults=loaded.faults)
        stack.callback(bench.close)
        devices = stack.enter_context(open_devices(rig, bench.clock))
        folder = new_run_folder(lab, bench.clock.utc_ns(), f"{loaded.measurement.name}-replay")
        meta = _record(tape, loaded, what_if, wanted.transport) | {"run": folder.name}
        archive = create_run(folder, texts=loaded.texts, itinerary=tape.itinerary, meta=meta)
        due.archive = stack.enter_context(archive)
        night = night_of(folder, loaded, tape.itinerary, archive, bench.clock, devices, bench, wanted)
        return folder, tape, through(night, wanted, lambda one: carry_out_again(one, tape))


@dataclass(slots=True)
class _Due:
    """Which row the instruments have to give: the first that is not stored yet."""

    archive: Archive | None = None

    def __call__(self) -> int:
        return 0 if self.archive is None else self.archive.rows


def _rig(rig: Rig, tape: Tape, due: _Due, times: float | None) -> Rig:
    """Return the rig with instruments that give what the tape holds, and axes that lose no time."""
    counts, meta = tape.meta["counting"] == "counts", tape.meta
    dialect = None if counts else read_dialect(config_dir() / "dialects" / "scpi-power.toml")[0]
    counter = DeviceEntry(
        driver="scpi-counter" if counts else "dialect",
        dialect=dialect,
        address="tcp://127.0.0.1:9002",
        channels=meta["channels"],
        slices=meta.get("slices", 0),
    )
    stages = DeviceEntry(driver="gcode-stage", address="tcp://127.0.0.1:9001")
    plain = {
        "device": STAGES,
        "speed_mm_s": AT_ONCE_MM_S,
        "settle_s": 0.0,
        "approach": "either",
        "takeup_s": 0.0,
    }
    axes = {
        name: axis.model_copy(update={**plain, "letter": "XYZUVWABC"[place]})
        for place, (name, axis) in enumerate(rig.axes.items())
    }
    lost = {row: len(times) for row, times in tape.lost_before().items()}
    bench = {
        "model": "replay",
        "times": times,
        "tape": {"readings": tape.readings, "due": due, "lost_before": lost},
    }
    return rig.model_copy(
        update={"devices": {STAGES: stages, COUNTER: counter}, "axes": axes, "bench": bench}
    )


def _record(tape: Tape, loaded: Loaded, what_if: WhatIf, transport: str) -> dict[str, Any]:
    """Return what a replay is: the record of what is replayed, and that it is a replay."""
    kept = {name: value for name, value in tape.meta.items() if name not in _ITS_OWN}
    return {
        **kept,
        **settings_of(loaded.measurement),
        "id": str(uuid.uuid4()),
        "kind": "replay",
        "clock": "virtual",
        "blinding": OPEN,
        "software": software(),
        "replay_of": {
            **{name: tape.meta.get(name) for name in ("id", "run", "kind")},
            "digest": tape.digest,
            "gate_digest": tape.gate_digest,
        },
        "replayed_utc": datetime.now(UTC).isoformat(timespec="seconds"),
        "what_if": {
            "changes": dict(what_if.changes),
            "faults": None if what_if.faults is None else str(what_if.faults),
        },
        "link": transport,
        "times_the_wall_clock": what_if.times,
    }
