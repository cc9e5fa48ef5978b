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
from daq.ports import Bench, Clock, Devices, Sink
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
from daq.tasks.turns import by_nobody
from daq.tasks.yardstick import yardstick

PICTURE = "picture.png"
SET_BACK = "Set back what was turned by hand: the task broke off, and the program turns nothing."


@dataclass(frozen=True, slots=True)
class Person:
    """Whoever is at the bench: `said` is told what goes on, `turns` does what only a person may do."""

    name: str = ""
    said: Callable[[str], None] = lambda text: None
    turns: Callable[[Turn], Turn] = by_nobody


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


@dataclass(frozen=True, slots=True, eq=False)
class _Work:
    """A task under way: what it is done with, where its archive goes, who is there."""

    task: Task
    loaded: Loaded
    folder: Path
    devices: Devices
    clock: Clock
    bench: Bench | None
    person: Person


def carry_out(task: Task, loaded: Loaded, lab: Path, person: Person) -> dict[str, Any]:
    """Carry out a task and return its record.

    Raises
    ------
    DaqError
        When the rig lacks what the task needs: nothing was moved.
    DeviceError, StorageError
        When a device or the disk failed; what was counted is kept, with a record that says so.
    """
    readings: list[Taken] = []
    with _at_bench(loaded, lab) as (devices, clock, bench):
        setting = _setting(task, loaded, lab, devices)
        _refuse_lost(devices, bench)
        with shut_out_after(devices):
            let_in(devices, clock)
            folder = new_bench_folder(lab, task.name, clock.utc_ns())
            person.said(f"{task.name}: {task.purpose}")
            work = _Work(task, loaded, folder, devices, clock, bench, person)
            outcome, trouble = _tried(work, setting, readings)
            record = _record(work, outcome, readings) | {"broken_off": trouble is not None}
    write_outcome(folder, record)
    draw_task(folder / PICTURE, f"{task.name}: {outcome.verdict}. {outcome.sentence}", outcome.panels)
    if trouble is not None:
        raise trouble
    return record | {"record": f"{task.name}/{folder.name}", "picture": str(folder / PICTURE)}


def _setting(task: Task, loaded: Loaded, lab: Path, devices: Devices) -> Setting:
    """Return what a task knows before it begins; refuses one whose rig lacks what it needs."""
    values, missing = known(loaded, lab)
    measures = yardstick(loaded.measurement, loaded.rig)
    setting = Setting(loaded.measurement, loaded.rig, measures, bool(devices.shutter), values, missing)
    lacking = task.lacks(setting)
    if lacking:
        raise DaqError(" ".join(lacking).rstrip("."), where=f"task {task.name}", remedy="Nothing was moved")
    return setting


@contextmanager
def _at_bench(loaded: Loaded, lab: Path) -> Iterator[tuple[Devices, Clock, Bench | None]]:
    """Give the devices of a rig; simulated ones stand where the last task left them."""
    if not loaded.rig.simulated:
        clock = RealClock()
        with open_devices(loaded.rig, clock) as devices:
            yield devices, clock, None
        return
    state = kept_state(lab, loaded.rig.name)
    bench = open_bench(
        loaded.rig, seed=loaded.bench_seed, transport="direct", state=state, faults=loaded.faults
    )
    try:
        with open_devices(loaded.rig, bench.clock) as devices:
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


def _tried(work: _Work, setting: Setting, readings: list[Taken]) -> tuple[Outcome, DaqError | None]:
    """Return what a task found or why it failed, and the trouble of a device or the disk."""
    try:
        return _measured(work, setting, readings), None
    except (DeviceError, StorageError) as error:
        return _failed(error), error
    except DaqError as error:
        return _failed(error), None


def _measured(work: _Work, setting: Setting, readings: list[Taken]) -> Outcome:
    """Take the visits of a task into its archive, and fit them."""
    asks, whole = work.task.asks(setting, ()), work.loaded.itinerary()
    meta = record_of(work.loaded, whole, work.clock, work.devices, work.bench) | {
        "kind": "bench",
        "task": work.task.name,
        "run": work.folder.name,
        "visits_planned": len(asks),
        "visits_per_stand": 1,
    }
    planned = cast(Itinerary, _planned(asks, whole))
    with create_run(work.folder, texts=work.loaded.texts, itinerary=planned, meta=meta) as archive:
        try:
            _take(work, setting, archive, asks, readings)
            return work.task.fit(setting, tuple(readings))
        finally:
            archive.finish({"ended_utc": stamp(work.clock.utc_ns())})


def _take(work: _Work, setting: Setting, archive: Sink, asks: Sequence[Ask], readings: list[Taken]) -> None:
    """Take visits until the task asks for none; whoever turned a knob is told when they break off."""
    devices, rig = work.devices, work.loaded.rig
    mask = FreeMask(devices.mask, mask_stage(devices, devices.mask), rig.axes[rig.mask.axis].settle_s)
    turned = partial(_turned, work.person, work.bench)
    rules = rules_of(work.loaded.measurement.quality.model_dump())
    first: int | None = 0
    try:
        while asks:
            for one in taken(asks, devices, mask, archive, work.clock, first, turned, rules):
                readings.append(one)
                if len(readings) % 100 == 0:
                    work.person.said(f"{len(readings)} visits")
            asks, first = work.task.asks(setting, tuple(readings)), None
    except BaseException:
        if any(ask.turn is not None for ask, _ in readings):
            work.person.said(SET_BACK)
        raise


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


def _record(work: _Work, outcome: Outcome, readings: Sequence[Taken]) -> dict[str, Any]:
    task, now_ns = work.task, work.clock.utc_ns()
    until = datetime.fromtimestamp(now_ns / 1e9, UTC) + timedelta(days=task.days)
    made = software()
    return {
        "task": task.name,
        "at_utc": stamp(now_ns),
        "ok": outcome.verdict == "pass",
        "values": dict(outcome.values),
        "se": dict(outcome.se),
        "verdict": outcome.verdict,
        "sentence": outcome.sentence,
        "valid_until": None if outcome.verdict == "fail" else until.isoformat(),
        "holds_for": list(task.holds_for),
        "set_up": set_up_of(work.loaded.rig),
        "model": outcome.model,
        "chi2": outcome.chi2,
        "dof": outcome.dof,
        "visits": len(readings),
        "asked": [_short(ask) for ask, _ in readings],
        "by": work.person.name or getpass.getuser(),
        "software": {name: made[name] for name in ("name", "version", "commit", "changed")},
    }


def _short(ask: Ask) -> dict[str, Any]:
    """Return what was asked for without what was left as it is."""
    return {name: value for name, value in asdict(ask).items() if value not in (None, "", False)}
