"""Equipping: the clock, the bench and everything else that a run holds while it is under way."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from contextlib import ExitStack
from dataclasses import dataclass, field, replace
from datetime import datetime
from pathlib import Path
from typing import Any

import xarray as xr

from daq.devices.clock import RealClock
from daq.estimate import Judge, Running
from daq.estimate.quality import rules_of
from daq.estimate.standing import Change
from daq.itinerary import Itinerary, plan_of
from daq.ports import Bench, Clock, Devices
from daq.records import Reading
from daq.service.asked import Asked
from daq.service.blind import at_hand
from daq.service.ending import stopping_of
from daq.service.extensions import open_bench
from daq.service.live import Live, stamp
from daq.service.load import Loaded
from daq.service.night import Night
from daq.service.parking import BENCH_FILE
from daq.service.room import events_due, exhausted, room_warning, shortage
from daq.storage.log import RunLog, read_log
from daq.storage.run import Archive


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


def clock_of(
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
