"""Starting: a run, a rehearsal, or one that goes on after a break; what all of them share."""

from __future__ import annotations

import getpass
from contextlib import ExitStack
from pathlib import Path

from daq.devices.registry import open_devices
from daq.errors import DeviceError, StorageError
from daq.estimate import readings_of_dataset
from daq.ports import Devices
from daq.service.bench_records import earlier
from daq.service.blind import keep_promise, promise
from daq.service.course import carry_out
from daq.service.equip import Wanted, clock_of, night_of
from daq.service.groups import Place, place_after
from daq.service.live import stamp
from daq.service.load import Loaded, Wishes, load_run
from daq.service.night import Night, tell
from daq.service.record import record_of
from daq.service.requests import lapse
from daq.service.through import through
from daq.storage.lab import new_run_folder
from daq.storage.reader import open_visits, read_meta
from daq.storage.run import create_run, open_run


def begin(loaded: Loaded, lab: Path, wanted: Wanted) -> tuple[Path, str]:
    """Carry out a new run and return its folder and how it ended.

    Raises
    ------
    DeviceError, StorageError
        See `carry_out`; the folder is kept and the run can be resumed.
    """
    itinerary = loaded.itinerary()
    with ExitStack() as stack:
        clock, bench = clock_of(stack, loaded, wanted)
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
        clock, bench = clock_of(stack, loaded, wanted, visits, folder)
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
