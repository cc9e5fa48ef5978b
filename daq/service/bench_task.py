"""A bench task carried out, on a real or a simulated bench: its visits archived, its outcome kept."""

from __future__ import annotations

import getpass
from collections.abc import Callable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from dataclasses import asdict, dataclass
from datetime import UTC, datetime, timedelta
from functools import partial
from pathlib import Path
from typing import Any, cast

import numpy as np

from daq.devices.clock import RealClock
from daq.devices.registry import open_devices
from daq.errors import DaqError, DeviceError, StorageError
from daq.estimate.quality import rules_of
from daq.itinerary import Itinerary
from daq.ports import Bench, Clock, Devices
from daq.service.beam import let_in, shut_out_after
from daq.service.bench_records import known, set_up_of
from daq.service.extensions import open_bench
from daq.service.live import stamp
from daq.service.load import Loaded
from daq.service.record import record_of
from daq.service.software import software
from daq.storage.bench import keep_state, kept_state, new_bench_folder, write_outcome
from daq.storage.run import create_run
from daq.tasks import Outcome, Setting, Task
from daq.tasks.contract import Ask, Taken, Turn
from daq.tasks.moves import FreeMask, mask_stage, taken
from daq.tasks.picture import draw_task
from daq.tasks.yardstick import yardstick

PICTURE = "picture.png"


@dataclass(frozen=True, slots=True)
class Person:
    """Whoever is at the bench: `said` is told what goes on, `turns` does what only a person may do."""

    name: str = ""
    said: Callable[[str], None] = lambda text: None
    turns: Callable[[Turn], Turn] = lambda turn: turn


@dataclass(frozen=True, slots=True, eq=False)
class _Planned:
    """The first visits of a task, as the archive wants an itinerary."""

    opening: Any
    position_mm: Any
    start_s: Any
    dwell_s: Any
    stand: Any
    lap: Any
    pair: Any
    forward: Any
    positions_mm: Any
    weights: Any
    signs: Mapping[str, Any]


def carry_out(task: Task, loaded: Loaded, lab: Path, person: Person) -> dict[str, Any]:
    """Carry out a task and return its record.

    Raises
    ------
    DaqError
        When the rig lacks what the task needs: nothing was opened.
    DeviceError, StorageError
        When a device or the disk failed; what was counted is kept, with a record that says so.
    """
    rig = loaded.rig
    values, missing = known(loaded, lab)
    with _at_bench(loaded, lab) as (devices, clock, bench):
        measures = yardstick(loaded.measurement, rig)
        setting = Setting(loaded.measurement, rig, measures, bool(devices.shutter), values, missing)
        lacking = task.lacks(setting)
        if lacking:
            raise DaqError(
                " ".join(lacking).rstrip("."), where=f"task {task.name}", remedy="Nothing was moved"
            )
        _refuse_lost(devices, bench)
        let_in(devices, clock)
        folder = new_bench_folder(lab, task.name, clock.utc_ns())
        person.said(f"{task.name}: {task.purpose}")
        trouble: DaqError | None = None
        readings: list[Taken] = []
        try:
            outcome = _measured(task, setting, loaded, folder, devices, clock, bench, person, readings)
        except (DeviceError, StorageError) as error:
            outcome, trouble = _failed(error), error
        except DaqError as error:
            outcome = _failed(error)
        record = _record(task, loaded, folder, outcome, clock, person, readings)
        record |= {"broken_off": trouble is not None}
    write_outcome(folder, record)
    draw_task(folder / PICTURE, f"{task.name}: {outcome.verdict}. {outcome.sentence}", outcome.panels)
    if trouble is not None:
        raise trouble
    return record | {"record": f"{task.name}/{folder.name}", "picture": str(folder / PICTURE)}


@contextmanager
def _at_bench(loaded: Loaded, lab: Path) -> Iterator[tuple[Devices, Clock, Bench | None]]:
    """Give the devices of a rig; simulated ones stand where the last task left them."""
    if not loaded.rig.simulated:
        clock = RealClock()
        with open_devices(loaded.rig, clock) as devices, shut_out_after(devices):
            yield devices, clock, None
        return
    state = kept_state(lab, loaded.rig.name)
    bench = open_bench(
        loaded.rig, seed=loaded.bench_seed, transport="direct", state=state, faults=loaded.faults
    )
    try:
        with open_devices(loaded.rig, bench.clock) as devices, shut_out_after(devices):
            yield devices, bench.clock, bench
        keep_state(lab, loaded.rig.name, bench.keep())
    finally:
        bench.close()


def _refuse_lost(devices: Devices, bench: Bench | None) -> None:
    """Home the axes of a simulated bench; an axis of a real one that is lost is not moved."""
    for stage in devices.stages:
        if stage.state().homed:
            continue
        if bench is None:
            remedy = f"See that nothing is in its way, then `home {stage.name}` in `tercet task by-hand`"
            raise DeviceError(
                "it has no reference and is not moved", where=f"axis {stage.name}", remedy=remedy
            )
        stage.home()


def _measured(
    task: Task,
    setting: Setting,
    loaded: Loaded,
    folder: Path,
    devices: Devices,
    clock: Clock,
    bench: Bench | None,
    person: Person,
    readings: list[Taken],
) -> Outcome:
    """Take the visits of a task into its archive, and fit them."""
    axis = loaded.rig.axes[loaded.rig.mask.axis]
    mask = FreeMask(devices.mask, mask_stage(devices, devices.mask), axis.settle_s)
    asks = task.asks(setting, ())
    whole = loaded.itinerary()
    meta = record_of(loaded, whole, clock, devices, bench) | {
        "kind": "bench",
        "task": task.name,
        "run": folder.name,
        "visits_planned": len(asks),
        "visits_per_stand": 1,
    }
    planned = cast(Itinerary, _planned(asks, whole))
    turned = partial(_turned, person, bench)
    rules = rules_of(loaded.measurement.quality.model_dump())
    with create_run(folder, texts=loaded.texts, itinerary=planned, meta=meta) as archive:
        try:
            first: int | None = 0
            while asks:
                for one in taken(asks, devices, mask, archive, clock, first, turned, rules):
                    readings.append(one)
                    if len(readings) % 100 == 0:
                        person.said(f"{len(readings)} visits")
                asks, first = task.asks(setting, tuple(readings)), None
            return task.fit(setting, tuple(readings))
        finally:
            archive.finish({"ended_utc": stamp(clock.utc_ns())})


def _turned(person: Person, bench: Bench | None, turn: Turn) -> Turn:
    """Have a knob turned: by the person, or on a simulated bench as a person would."""
    if bench is None:
        return person.turns(turn)
    person.said(f"on the simulated bench: {turn.text}")
    bench.turn(turn.knob, turn.value)
    return turn


def _planned(asks: Sequence[Ask], whole: Itinerary) -> _Planned:
    number = np.arange(len(asks))
    return _Planned(
        opening=np.array([ask.opening for ask in asks], np.int64),
        position_mm=np.array([ask.position_mm for ask in asks]),
        start_s=np.zeros(len(asks)),
        dwell_s=np.array([ask.dwell_s for ask in asks]),
        stand=number,
        lap=np.zeros(len(asks), np.int64),
        pair=np.full(len(asks), -1),
        forward=np.ones(len(asks), bool),
        positions_mm=whole.positions_mm,
        weights=whole.weights,
        signs=whole.signs,
    )


def _failed(error: DaqError) -> Outcome:
    return Outcome({}, {}, "fail", str(error), "none", ())


def _record(
    task: Task,
    loaded: Loaded,
    folder: Path,
    outcome: Outcome,
    clock: Clock,
    person: Person,
    readings: Sequence[Taken],
) -> dict[str, Any]:
    at = datetime.fromtimestamp(clock.utc_ns() / 1e9, UTC)
    made = software()
    return {
        "task": task.name,
        "at_utc": stamp(clock.utc_ns()),
        "ok": outcome.verdict == "pass",
        "values": dict(outcome.values),
        "se": dict(outcome.se),
        "verdict": outcome.verdict,
        "sentence": outcome.sentence,
        "valid_until": None if outcome.verdict == "fail" else (at + timedelta(days=task.days)).isoformat(),
        "holds_for": list(task.holds_for),
        "set_up": set_up_of(loaded.rig),
        "model": outcome.model,
        "chi2": outcome.chi2,
        "dof": outcome.dof,
        "visits": len(readings),
        "asked": [_short(ask) for ask, _ in readings],
        "by": person.name or getpass.getuser(),
        "software": {name: made[name] for name in ("name", "version", "commit", "changed")},
    }


def _short(ask: Ask) -> dict[str, Any]:
    """Return what was asked for without what was left as it is."""
    return {name: value for name, value in asdict(ask).items() if value not in (None, "", False)}
