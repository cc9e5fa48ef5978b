"""The service: one process that owns a lab's rig, starts what is booked, and says what became of it."""

from __future__ import annotations

import logging
import queue
from collections.abc import Callable, Mapping
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from apscheduler.schedulers.background import BackgroundScheduler

from daq.errors import DaqError
from daq.itinerary import Itinerary
from daq.service.arming import arming_of, use_arming
from daq.service.asked import Asked
from daq.service.bookings import (
    GOING_ON,
    Booking,
    bookings,
    dealt_with,
    end_of,
    note_outcome,
    note_start,
    start_of,
)
from daq.service.calendar import missed, starts
from daq.service.desk import answer_desk, tell_desk
from daq.service.equip import Wanted
from daq.service.load import Loaded, load
from daq.service.messages import NOTE, post
from daq.service.night import WITH_PROGRAM
from daq.service.outlets import Outlets
from daq.service.requests import current_run
from daq.service.start import begin, resume
from daq.storage.feed import read_feed
from daq.storage.lock import is_written
from daq.storage.reader import read_meta

log = logging.getLogger(__name__)

LOOK_EVERY_S = 2.0
Due = tuple[Booking, datetime]


def serve(lab: Path, asked: Asked, say: Callable[[str], None] = lambda text: None) -> dict[str, int]:
    """Start what is booked in a lab that this process owns, until told to leave; return what was done.

    An interrupted run of the lab is gone on with first. While a run is going on, another start is skipped.
    """
    done = {"resumed": 0, "started": 0}
    due: queue.Queue[Due] = queue.Queue()
    scheduler = BackgroundScheduler(timezone=UTC)
    scheduler.add_job(_look, "interval", seconds=LOOK_EVERY_S, args=(lab, scheduler, due), max_instances=1)
    outlets = Outlets(lab, scheduler)
    scheduler.add_job(_desk, "interval", seconds=LOOK_EVERY_S, args=(lab,), max_instances=1)
    scheduler.start()
    outlets.ready()
    try:
        _desk(lab)
        done["resumed"] = _go_on(lab, asked, outlets, say)
        _look(lab, scheduler, due)
        if not asked.leave:
            say(_waiting(lab))
        done["started"] = _start_what_is_due(lab, asked, due, outlets, say)
        return done
    finally:
        scheduler.shutdown(wait=True)
        outlets.send()


def _waiting(lab: Path) -> str:
    """Return what the service waits for, in words."""
    coming = [(when, one) for one in bookings(lab) if (when := _next(lab, one)) is not None]
    if not coming:
        return "nothing is booked; `tercet book` adds a start. Ctrl-C ends the service."
    when, one = min(coming, key=lambda pair: pair[0])
    local = when.astimezone(one.times.zone)
    return f"next start {local:%Y-%m-%d %H:%M} {one.times.zone.key}: {one.file.name} (booking {one.number})"


def _start_what_is_due(
    lab: Path, asked: Asked, due: queue.Queue[Due], outlets: Outlets, say: Callable[[str], None]
) -> int:
    started = 0
    while not asked.leave:
        outlets.alive()
        try:
            booking, when = due.get(timeout=0.2)
        except queue.Empty:
            continue
        if not dealt_with(lab, booking, when):
            started += _start(lab, asked, booking, when, outlets, say)
    return started


def _start(
    lab: Path, asked: Asked, booking: Booking, due: datetime, outlets: Outlets, say: Callable[[str], None]
) -> bool:
    """Start a booked run, or say why not; return whether it was started."""
    begun = list[str]()

    def begins(folder: Path, itinerary: Itinerary) -> None:
        # Written down before the first visit: whatever happens from here on, it is not started twice.
        note_start(lab, booking, due, GOING_ON, folder.name)
        begun.append(folder.name)
        outlets.begins(itinerary)
        say(f"booking {booking.number}: {folder.name} starts{_virtually(loaded)}")

    reason = _refusal(booking, due)
    try:
        loaded = load(booking.file, booking.wishes)
        armed = arming_of(loaded, lab)
        reason = reason or use_arming(loaded, lab)
        if reason:
            _tell(lab, booking, due, f"skipped: {reason}", say)
            return False
        asked.for_another_run()
        wanted = Wanted(
            "tcp" if loaded.rig.simulated else "",
            asked=asked,
            on_start=begins,
            until=end_of(booking, datetime.now(UTC)),
            armed=armed,
            **outlets.wishes(),
        )
        _, ended = begin(loaded, lab, wanted)
    except DaqError as error:
        ended = f"failed: {error}"
    _tell(lab, booking, due, ended, say, begun[0] if begun else None)
    return bool(begun)


def _virtually(loaded: Loaded) -> str:
    return ": every device is simulated, so it is a rehearsal in virtual time" if loaded.rig.simulated else ""


def _tell(
    lab: Path,
    booking: Booking,
    due: datetime,
    outcome: str,
    say: Callable[[str], None],
    run: str | None = None,
) -> None:
    """Write down what became of a start, and leave a message for people."""
    if run is None:
        note_start(lab, booking, due, outcome)
    else:
        note_outcome(lab, run, outcome)
    say(f"booking {booking.number}: {run or booking.file.name}: {outcome}")
    local = f"{due.astimezone(booking.times.zone):%Y-%m-%d %H:%M} {booking.times.zone.key}"
    ran = f" Run {run}." if run else ""
    text = f"Booking {booking.number}, due {local}: {outcome.rstrip('.')}.{ran}"
    post(lab, NOTE, f"{booking.file.stem}: {outcome}", text)


def _refusal(booking: Booking, due: datetime) -> str:
    """Return why a start may not be made, or nothing."""
    if missed(booking.times, due, datetime.now(UTC)):
        return f"more than {booking.times.late_s:g} s late"
    return ""


def _desk(lab: Path) -> None:
    """Answer what operators asked of the lab, and tell the page what is booked."""
    answer_desk(lab)
    tell_desk(lab)


def _look(lab: Path, scheduler: BackgroundScheduler, due: queue.Queue[Due]) -> None:
    """Schedule the next start of every booking, and forget those that were cancelled."""
    wanted = {}
    for booking in bookings(lab):
        when = _next(lab, booking)
        if when is not None:
            wanted[f"{booking.number} {when.isoformat()}"] = (booking, when)
    for job in scheduler.get_jobs():
        if job.name == "start" and job.id not in wanted:
            job.remove()
    for name, (booking, when) in wanted.items():
        scheduler.add_job(
            due.put,
            "date",
            run_date=max(when, datetime.now(UTC)),
            args=((booking, when),),
            id=name,
            name="start",
            replace_existing=True,
            misfire_grace_time=None,
        )


def _next(lab: Path, booking: Booking) -> datetime | None:
    """Return the next start that was not dealt with: one that is late is still due while its grace lasts."""
    after = datetime.now(UTC) - timedelta(seconds=booking.times.late_s)
    return next((when for when in starts(booking.times, after) if not dealt_with(lab, booking, when)), None)


def _go_on(lab: Path, asked: Asked, outlets: Outlets, say: Callable[[str], None]) -> int:
    """Go on with the run written last when it was broken off without a goodbye; return whether it did.

    A run that a person or a fault has ended is left to a person.
    """
    folder = _broken_off(lab)
    if folder is None:
        return 0
    say(f"{folder.name} was broken off and is gone on with")
    started = start_of(lab, folder.name)
    try:
        meta = read_meta(folder)
        wanted = Wanted(
            "tcp" if meta["clock"] == "virtual" else "",
            asked=asked,
            on_start=lambda _, itinerary: outlets.begins(itinerary),
            until=_until(lab, started),
            **outlets.wishes(),
        )
        _, ended = resume(folder, wanted)
    except DaqError as error:
        ended = f"could not be gone on with: {error}"
    say(f"{folder.name}: {ended}")
    if started is not None:
        note_outcome(lab, folder.name, ended)
    post(lab, NOTE, f"{folder.name}: {ended}", f"{folder.name} was broken off and gone on with: {ended}.")
    return 1


def _broken_off(lab: Path) -> Path | None:
    name = current_run(lab)
    folder = lab / "runs" / name
    if not name or is_written(folder):
        return None
    meta = read_meta(folder)
    if meta.get("finished") or meta["kind"] in ("replay", "import"):
        return None
    ended = (read_feed(folder) or {}).get("ended")
    return None if ended and ended["reason"] != WITH_PROGRAM else folder


def _until(lab: Path, started: Mapping[str, Any] | None) -> datetime | None:
    """Return when the run of a booked start has to be over."""
    if started is None:
        return None
    booking = next((one for one in bookings(lab, cancelled=True) if one.number == started["booking"]), None)
    return None if booking is None else end_of(booking, datetime.fromisoformat(started["due_utc"]))
