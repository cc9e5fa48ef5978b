"""Starting: a run, a rehearsal, or one that goes on after a break; what all of them share."""

from __future__ import annotations

import getpass
import time
from collections.abc import Callable, Mapping
from contextlib import ExitStack
from dataclasses import dataclass, field, replace
from datetime import datetime
from pathlib import Path
from typing import Any

import xarray as xr

from daq.devices.clock import RealClock
from daq.devices.registry import open_devices
from daq.errors import DaqError, DeviceError, StorageError
from daq.estimate import Judge, Running, readings_of_dataset
from daq.estimate.quality import rules_of
from daq.estimate.standing import Change
from daq.estimate.stopping import BROKEN
from daq.itinerary import Itinerary, plan_of
from daq.ports import Bench, Clock, Devices
from daq.records import Reading
from daq.sequencer import State
from daq.service.asked import Asked
from daq.service.beam import let_in
from daq.service.bench_records import earlier
from daq.service.blind import at_hand, keep_promise, promise
from daq.service.course import carry_out
from daq.service.ending import how_it_ended, stopping_of
from daq.service.extensions import open_bench
from daq.service.groups import Place, place_after
from daq.service.live import Live, stamp
from daq.service.load import Loaded, Wishes, load_run
from daq.service.night import AT_REQUEST, COMPLETE, STOPPED, WITH_PROGRAM, Night, look, tell
from daq.service.parking import BENCH_FILE, park, stop_now
from daq.service.record import record_of
from daq.service.requests import lapse, open_requests, settle
from daq.service.room import events_due, exhausted, room_warning, shortage
from daq.storage.digest import digest, gate_digest
from daq.storage.lab import new_run_folder
from daq.storage.log import RunLog, read_log
from daq.storage.reader import open_visits, read_meta
from daq.storage.run import Archive, create_run, open_run

HOLD_POLL_S = 0.2


@dataclass(frozen=True, slots=True)
class Wanted:
    """How a run is to be carried out; `transport` "tcp" or "direct" in a rehearsal, "" on the real clock."""

    transport: str = ""
    home: bool = False
    asked: Asked = field(default_factory=Asked)
    on_start: Callable[[Path, Itinerary], None] = lambda folder, itinerary: None
    on_visit: Callable[[Reading], None] = lambda reading: None
    on_warning: Callable[[str, Change, bool], None] = lambda run, change, quietly: None
    on_feed: Callable[[Mapping[str, Any]], None] = lambda feed: None
    alive: Callable[[], None] = lambda: None
    until: datetime | None = None
    armed: Mapping[str, Any] = field(default_factory=dict)  # by whom, when, without which records and why


def begin(loaded: Loaded, lab: Path, wanted: Wanted) -> tuple[Path, str]:
    """Carry out a new run and return its folder and how it ended.

    Raises
    ------
    DeviceError, StorageError
        See `carry_out`; the folder is kept and the run can be resumed.
    """
    itinerary = loaded.itinerary()
    with ExitStack() as stack:
        clock, bench = _clock(stack, loaded, wanted)
        devices = stack.enter_context(open_devices(loaded.rig, clock))
        _reference(devices, allowed=True)
        meta = record_of(loaded, itinerary, clock, devices, bench)
        folder = new_run_folder(lab, clock.utc_ns(), loaded.measurement.name)
        meta |= {"run": folder.name, "bench_records": earlier(loaded, lab), "armed": dict(wanted.armed)}
        hidden = loaded.measurement.blinding
        if hidden is not None:
            meta |= promise(lab, folder.name, itinerary.slits, hidden.model_dump())
        archive = create_run(folder, texts=loaded.texts, itinerary=itinerary, meta=meta)
        stack.enter_context(archive)
        if hidden is not None:
            keep_promise(folder, meta, getpass.getuser())
        night = night_of(folder, loaded, itinerary, archive, clock, devices, bench, wanted)
        return folder, through(night, wanted, lambda one: carry_out(one, Place(0)))


def resume(folder: Path, wanted: Wanted) -> tuple[Path, str]:
    """Carry on with a run after a break: the interrupted stand again, whole, then the next one."""
    meta = read_meta(folder)
    if meta.get("finished"):
        raise StorageError("this run is finished", where=str(folder), remedy="Start a new one")
    if meta["kind"] in ("replay", "import"):
        raise StorageError(f"this is no run but a {meta['kind']}", where=str(folder), remedy="Make it again")
    loaded = load_run(folder, Wishes(**meta["wishes"]))
    itinerary = loaded.itinerary()
    with ExitStack() as stack:
        archive = stack.enter_context(open_run(folder))
        visits = open_visits(folder)
        clock, bench = _clock(stack, loaded, wanted, visits, folder)
        devices = stack.enter_context(open_devices(loaded.rig, clock))
        _reference(devices, allowed=wanted.home or bench is not None)
        night = night_of(folder, loaded, itinerary, archive, clock, devices, bench, wanted)
        for reading in readings_of_dataset(visits):
            night.judge.take(reading)
            night.running.add(reading)
            night.live.took(reading, night.judge.odd)
            night.counted_ns = reading.gate_close_ns
        _let_lapse(night)
        place = place_after(itinerary, visits)
        return folder, through(night, wanted, lambda one: carry_out(one, place))


def _let_lapse(night: Night) -> None:
    """Answer what was asked while nobody carried the run out: it is not obeyed hours later."""
    why = f"not heard: nobody carried the run out; it goes on at {stamp(night.clock.utc_ns())}"
    for request in lapse(night.folder.parents[1], night.folder.name, why):
        tell(night, f"{request.what} lapsed", who=request.who, text=f"{request.who}'s {request.what}: {why}.")


def through(night: Night, wanted: Wanted, course: Callable[[Night], str]) -> str:
    """Carry a night out; the archive is finished when it ends in good order, else left to be resumed."""
    _listen(night.asked, night.folder)
    wanted.on_start(night.folder, night.itinerary)
    night.live.write(night.state.value, night.running, now=True)
    try:
        ended = _interruptibly(night, course)
    except KeyboardInterrupt:
        stop_now(night)
        ended = WITH_PROGRAM if night.asked.by_system else STOPPED
    except DaqError as error:
        night.asked.kind = BROKEN
        _end(night, str(error))
        raise
    _end(night, ended)
    if ended not in (STOPPED, WITH_PROGRAM):
        night.archive.finish(_results(night, ended))
        if not wanted.transport:
            _report(night)
    return ended


def _report(night: Night) -> None:
    """Write the morning report beside a run; a report that fails costs the run nothing."""
    from daq.service.morning import write_report  # pictures take a second to import

    try:
        write_report(night.folder)
    except DaqError as error:
        tell(night, "no report", text=f"The morning report was not written: {error}")


def _listen(asked: Asked, folder: Path) -> None:
    """Let a run hear what operators leave for it in the book of its lab."""
    lab = folder.parents[1]
    asked.requests = lambda: open_requests(lab, folder.name)
    asked.settled = lambda request, outcome: settle(lab, request, outcome)
    asked.idle = lambda: time.sleep(HOLD_POLL_S)


def _results(night: Night, ended: str) -> dict[str, Any]:
    """Return what a finished archive says of its outcome: derived, and checked again by `tercet verify`."""
    visits = open_visits(night.folder)
    figures = night.running.estimate().to_json()
    return {
        "ended": ended,
        "ended_utc": stamp(night.clock.utc_ns()),
        "stop": {"reason": ended, **how_it_ended(night)},
        "results": {name: value for name, value in figures.items() if not isinstance(value, list)}
        | {"blinding": night.blinding.state},
        "digest": digest(visits),
        "gate_digest": gate_digest(visits),
    }


def _interruptibly(night: Night, course: Callable[[Night], str]) -> str:
    """Carry a night out; a stop may break in here, but not while an archive is opened or finished."""
    night.asked.interruptible = True
    try:
        if night.asked.stop:
            raise KeyboardInterrupt
        let_in(night.devices, night.clock)
        return course(night)
    finally:
        night.asked.interruptible = False


def _end(night: Night, reason: str) -> None:
    park(night)
    night.become(State.ENDED)
    night.holds.clear()
    tell(night, "ended", reason=reason, **how_it_ended(night))
    asked_for = reason in (COMPLETE, AT_REQUEST, STOPPED, WITH_PROGRAM)
    look(night, "" if asked_for else reason, anew=True, over=True)
    night.live.write(night.state.value, night.running, reason, now=True)


def night_of(
    folder: Path,
    loaded: Loaded,
    itinerary: Itinerary,
    archive: Archive,
    clock: Clock,
    devices: Devices,
    bench: Bench | None,
    wanted: Wanted,
) -> Night:
    """Return everything that a run holds while it is under way."""
    blinding = at_hand(folder, archive.meta)
    plan = replace(plan_of(itinerary, loaded.measurement), blinding=blinding)
    rules = rules_of(loaded.measurement.quality.model_dump())
    many, events = len(itinerary), events_due(itinerary, loaded.rig.list_mode)
    live = Live(
        folder,
        archive.meta,
        itinerary,
        clock,
        lambda: room_warning(folder, left := max(many - archive.rows, 0), events * left / many),
        _restarts(folder, clock),
        wanted.on_feed,
    )
    records = archive.meta.get("bench_records", {}) if archive.meta["counting"] == "counts" else None
    live.watcher.remedy_left = "register" in (records or {})
    return Night(
        folder=folder,
        itinerary=itinerary,
        archive=archive,
        clock=clock,
        devices=devices,
        running=Running(plan),
        judge=Judge(plan, rules, itinerary.rates_hz),
        stopping=stopping_of(itinerary, loaded.measurement),
        blinding=blinding,
        live=live,
        log=RunLog(folder),
        asked=wanted.asked,
        bench=bench,
        on_visit=wanted.on_visit,
        on_warning=lambda change: wanted.on_warning(folder.name, change, bench is not None or live.muted),
        alive=wanted.alive,
        shortage=lambda: shortage(folder, bench=bench),
        exhausted=lambda: exhausted(folder, bench=bench),
        records=records,
        until_utc_ns=None if wanted.until is None else round(wanted.until.timestamp() * 1e9),
    )


def _clock(
    stack: ExitStack,
    loaded: Loaded,
    wanted: Wanted,
    visits: xr.Dataset | None = None,
    folder: Path | None = None,
) -> tuple[Clock, Bench | None]:
    """Return the clock of a run; a resumed one goes on after its last gate: no count is drawn twice."""
    last_ns = int(visits["gate_close_ns"].values.max()) if visits is not None and visits.sizes["row"] else 0
    if not wanted.transport:
        return RealClock(start_ns=last_ns + _break_ns(visits, time.time_ns())), None
    kept = None if folder is None else _kept(folder)
    bench = open_bench(
        loaded.rig,
        seed=loaded.bench_seed,
        transport=wanted.transport,
        state=kept,
        faults=loaded.faults,
    )
    stack.callback(bench.close)
    bench.clock.sleep_until(last_ns)
    return bench.clock, bench


def _restarts(folder: Path, clock: Clock) -> int:
    """Return how often the program went on with a run within the last hour; rehearsals have no such hour."""
    if clock.kind != "real":
        return 0
    since = stamp(clock.utc_ns() - 3600 * 10**9)
    return sum(entry["event"] == "run goes on" and entry["utc"] >= since for entry in read_log(folder))


def _break_ns(visits: xr.Dataset | None, now_utc_ns: int) -> int:
    """Return how long a run was broken off: its clock goes on meanwhile, as the source does."""
    if visits is None or not visits.sizes["row"]:
        return 0
    last = visits.isel(row=-1)
    ended_ns = int(last["utc_ns"]) + int(last["gate_close_ns"]) - int(last["gate_open_ns"])
    return max(0, now_utc_ns - ended_ns)


def _kept(folder: Path) -> bytes | None:
    try:
        return (folder / BENCH_FILE).read_bytes()
    except FileNotFoundError:
        return None


def _reference(devices: Devices, allowed: bool) -> None:
    """Home every axis that has no reference, when a person said so; refuse to move otherwise."""
    for stage in devices.stages:
        if stage.state().homed:
            continue
        if not allowed:
            raise DeviceError(
                "this axis has lost its reference",
                where=f"axis {stage.name}",
                remedy="See at the bench that nothing is in its way, then resume with --home",
            )
        stage.home()
