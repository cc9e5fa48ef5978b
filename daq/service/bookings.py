"""Bookings: planned unattended starts, kept in the lab book, and what became of each."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import asdict, dataclass
from datetime import UTC, date, datetime, time
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo, ZoneInfoNotFoundError

from daq.errors import DescriptionError
from daq.service.calendar import DAILY, ONCE, WEEKDAYS, Times, starts
from daq.service.load import Wishes, load
from daq.service.requests import utc_now
from daq.storage.lab_book import insert, select, update

GOING_ON = "going on"


@dataclass(frozen=True, slots=True)
class Booking:
    """A planned start: which measurement, when, with which wishes, over by `end_at` local time."""

    number: int
    file: Path
    times: Times
    end_at: time | None
    wishes: Wishes
    who: str

    def next_start(self, after: datetime) -> datetime | None:
        """Return the next start at or after a moment, UTC; None when there is none."""
        return next(starts(self.times, after), None)


def book(
    lab: Path,
    file: Path,
    *,
    days: Sequence[str],
    at: str,
    zone: str,
    first_day: str,
    late_s: float,
    end_at: str | None,
    wishes: Wishes,
    who: str,
    now: datetime | None = None,
) -> Booking:
    """Add a booking to a lab and return it.

    Raises
    ------
    DescriptionError
        When the measurement cannot be carried out, a time cannot be read, or it would never start.
    """
    load(file, wishes)
    times = _times(days, at, zone, first_day, late_s)
    over_by = _time(end_at, "--end-by") if end_at else None
    _refuse_odd(times, over_by, now or datetime.now(UTC))
    number = insert(
        lab,
        "bookings",
        file=str(file.resolve()),
        days=",".join(times.days),
        at=at,
        zone=zone,
        first_day=first_day,
        late_s=late_s,
        end_at=end_at,
        wishes=json.dumps(asdict(wishes)),
        who=who,
        made_utc=utc_now(),
    )
    return Booking(number, file.resolve(), times, over_by, wishes, who)


def bookings(lab: Path, *, cancelled: bool = False) -> list[Booking]:
    """Return the bookings of a lab that nobody has cancelled, or all of them."""
    return [_of_row(row) for row in select(lab, "bookings", "1" if cancelled else "cancelled_utc IS NULL")]


def cancel(lab: Path, number: int) -> None:
    """Cancel a booking.

    Raises
    ------
    DescriptionError
        When there is no such booking.
    """
    if number not in {booking.number for booking in bookings(lab)}:
        raise DescriptionError((f"lab {lab} has no booking {number}. `tercet bookings` lists them.",))
    update(lab, "bookings", number, cancelled_utc=utc_now())


def note_start(lab: Path, booking: Booking, due: datetime, outcome: str, run: str | None = None) -> None:
    """Write down what became of a start."""
    due_utc = due.isoformat()
    insert(lab, "starts", booking=booking.number, due_utc=due_utc, utc=utc_now(), outcome=outcome, run=run)


def note_outcome(lab: Path, run: str, outcome: str) -> None:
    """Write down how the run of a start has ended."""
    started = start_of(lab, run)
    if started is not None:
        update(lab, "starts", started["id"], outcome=outcome)


def start_of(lab: Path, run: str) -> dict[str, Any] | None:
    """Return the booked start that a run came from, if it came from one."""
    found = select(lab, "starts", "run = ?", (run,))
    return found[-1] if found else None


def dealt_with(lab: Path, booking: Booking, due: datetime) -> bool:
    """Return whether a start was made or skipped before."""
    return bool(select(lab, "starts", "booking = ? AND due_utc = ?", (booking.number, due.isoformat())))


def _of_row(row: Mapping[str, Any]) -> Booking:
    return Booking(
        row["id"],
        Path(row["file"]),
        _times(row["days"].split(","), row["at"], row["zone"], row["first_day"], row["late_s"]),
        _time(row["end_at"], "end_at") if row["end_at"] else None,
        Wishes(**json.loads(row["wishes"])),
        row["who"],
    )


def _times(days: Sequence[str], at: str, zone: str, first_day: str, late_s: float) -> Times:
    lower = tuple(day.lower()[:3] if day.lower() not in (ONCE, DAILY) else day.lower() for day in days)
    known = {ONCE, DAILY, *WEEKDAYS}
    if not set(lower) <= known or (len(lower) > 1 and {ONCE, DAILY} & set(lower)):
        text = ", ".join(days)
        raise DescriptionError((f"--on: 'once', 'daily' or weekdays like mon,fri, not {text!r}.",))
    try:
        where = ZoneInfo(zone)
    except (ZoneInfoNotFoundError, ValueError) as error:
        raise DescriptionError((f"--zone: no time zone {zone!r}; name one like Europe/Berlin.",)) from error
    try:
        day = date.fromisoformat(first_day)
    except ValueError as error:
        raise DescriptionError((f"--first-day: a date like 2026-12-01, not {first_day!r}.",)) from error
    return Times(lower, _time(at, "--at"), where, day, late_s)


def _refuse_odd(times: Times, over_by: time | None, now: datetime) -> None:
    """Refuse what nobody can mean: a start in the past, an end at the start, a lateness below zero."""
    if not 0 <= times.late_s <= 86_400:
        raise DescriptionError((f"--late-min: from 0 to 1440 minutes, not {times.late_s / 60:g}.",))
    if over_by == times.at:
        raise DescriptionError((f"--end-by: {over_by:%H:%M} is the time of the start; give a later one.",))
    if next(starts(times, now), None) is None:
        when = f"{times.first_day} {times.at:%H:%M} {times.zone.key}"
        text = f"--at: {when} is past, so this booking would never start. Give --first-day or another time."
        raise DescriptionError((text,))


def _time(text: str, key: str) -> time:
    try:
        return time.fromisoformat(text)
    except ValueError as error:
        raise DescriptionError((f"{key}: a time like 18:30, not {text!r}.",)) from error


def end_of(booking: Booking, start: datetime) -> datetime | None:
    """Return when a run that starts then has to be over, UTC: the next `end_at` by the booking's zone."""
    if booking.end_at is None:
        return None
    local = start.astimezone(booking.times.zone)
    same_day = datetime.combine(local.date(), booking.end_at, booking.times.zone)
    days = 0 if same_day > local else 1
    following = date.fromordinal(local.date().toordinal() + days)
    return datetime.combine(following, booking.end_at, booking.times.zone).astimezone(UTC)
