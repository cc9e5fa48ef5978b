"""The service: one process that owns a lab's rig, starts what is booked, and says what became of it."""

from __future__ import annotations

import logging
import queue
from datetime import UTC, datetime, timedelta
from pathlib import Path

from apscheduler.schedulers.background import BackgroundScheduler

from daq.errors import DaqError
from daq.service.arming import use_arming
from daq.service.asked import Asked
from daq.service.bookings import Booking, bookings, dealt_with, end_of, note_start
from daq.service.calendar import missed, starts
from daq.service.load import load
from daq.service.mail import post, send_what_waits, settings_of
from daq.service.night import COMPLETE
from daq.service.owner import owned
from daq.service.start import Wanted, begin, resume
from daq.storage.lab import runs
from daq.storage.reader import read_meta

log = logging.getLogger(__name__)

LOOK_EVERY_S = 2.0
SEND_EVERY_S = 10.0
Due = tuple[Booking, datetime]


def serve(lab: Path, asked: Asked) -> int:
    """Start what is booked in a lab until the end is asked for; return how many runs were started.

    An interrupted run of the lab is gone on with first. While a run is going on, another start is skipped.

    Raises
    ------
    StorageError
        When another service owns the lab.
    """
    with owned(lab):
        _go_on(lab, asked)
        due: queue.Queue[Due] = queue.Queue()
        scheduler = BackgroundScheduler(timezone=UTC)
        scheduler.add_job(
            _look, "interval", seconds=LOOK_EVERY_S, args=(lab, scheduler, due), max_instances=1
        )
        scheduler.add_job(_send, "interval", seconds=SEND_EVERY_S, args=(lab,))
        scheduler.start()
        try:
            _look(lab, scheduler, due)
            return _start_what_is_due(lab, asked, due)
        finally:
            scheduler.shutdown(wait=True)
            _send(lab)


def _start_what_is_due(lab: Path, asked: Asked, due: queue.Queue[Due]) -> int:
    started = 0
    while not asked.leave:
        try:
            booking, when = due.get(timeout=0.2)
        except queue.Empty:
            continue
        if not dealt_with(lab, booking, when):
            started += _start(lab, asked, booking, when)
    return started


def _start(lab: Path, asked: Asked, booking: Booking, due: datetime) -> bool:
    """Start a booked run, or say why not; return whether it was started."""
    reason = _refusal(booking, due)
    if reason:
        _tell(lab, booking, due, f"skipped: {reason}")
        return False
    try:
        loaded = load(booking.file, booking.wishes)
        unarmed = use_arming(loaded, lab)
        if unarmed:
            _tell(lab, booking, due, f"skipped: {unarmed}")
            return False
        transport = "tcp" if loaded.rig.simulated else ""
        until = end_of(booking, datetime.now(UTC))
        folder, ended = begin(loaded, lab, Wanted(transport, asked=asked, until=until))
    except DaqError as error:
        _tell(lab, booking, due, f"failed: {error}")
        return True
    _tell(lab, booking, due, ended, folder.name)
    return True


def _tell(lab: Path, booking: Booking, due: datetime, outcome: str, run: str | None = None) -> None:
    """Write down what became of a start, and leave a message for people."""
    note_start(lab, booking, due, outcome, run)
    post(
        lab,
        "start",
        f"{booking.file.stem}: {outcome}",
        f"Booking {booking.number}, due {due}: {outcome}. {run or ''}",
    )


def _refusal(booking: Booking, due: datetime) -> str:
    """Return why a start may not be made, or nothing."""
    if missed(booking.times, due, datetime.now(UTC)):
        return f"more than {booking.times.late_s:g} s late"
    return ""


def _send(lab: Path) -> None:
    """Send the messages that wait; what is wrong with the settings goes to the log, and nothing is lost."""
    try:
        send_what_waits(lab, settings_of(lab).mail)
    except DaqError as error:
        log.error("%s", error)


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


def _go_on(lab: Path, asked: Asked) -> None:
    """Go on with the newest run of a lab when it was broken off."""
    found = runs(lab)
    if not found or read_meta(found[-1]).get("finished"):
        return
    meta = read_meta(found[-1])
    try:
        _, ended = resume(found[-1], Wanted("tcp" if meta["clock"] == "virtual" else "", asked=asked))
        log.warning("%s: gone on with; %s", found[-1].name, ended if ended != COMPLETE else "complete")
    except DaqError as error:
        log.error("%s could not be gone on with: %s", found[-1].name, error)
