"""When a booked run starts: local wall time on chosen days, reckoned in UTC, once at a clock change too."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from datetime import UTC, date, datetime, time, timedelta
from zoneinfo import ZoneInfo

WEEKDAYS = ("mon", "tue", "wed", "thu", "fri", "sat", "sun")
ONCE, DAILY = "once", "daily"


@dataclass(frozen=True, slots=True)
class Times:
    """Days ("once", "daily" or weekdays), local time and zone, first day, and how late a start may be [s]."""

    days: tuple[str, ...]
    at: time
    zone: ZoneInfo
    first_day: date
    late_s: float

    def on(self, day: date) -> datetime:
        """Return the start of one day in UTC.

        A time that the clocks skip is taken as much later as they skip; of one that comes twice, the first.
        """
        return datetime.combine(day, self.at, self.zone).astimezone(UTC)

    def runs_on(self, day: date) -> bool:
        """Return whether a run starts on a day."""
        if day < self.first_day:
            return False
        if self.days == (ONCE,):
            return day == self.first_day
        return self.days == (DAILY,) or WEEKDAYS[day.weekday()] in self.days


def starts(times: Times, after: datetime) -> Iterator[datetime]:
    """Yield the starts at or after a moment, in UTC, soonest first; at most ten years ahead."""
    day = max(times.first_day, (after.astimezone(times.zone) - timedelta(days=1)).date())
    for ahead in range(3660):
        this = day + timedelta(days=ahead)
        if times.runs_on(this) and times.on(this) >= after:
            yield times.on(this)


def missed(times: Times, due: datetime, now: datetime) -> bool:
    """Return whether a start that was due is too late to make up for."""
    return (now - due).total_seconds() > times.late_s


def latest(at: str, zone: str, now: datetime) -> datetime:
    """Return when it was that local time last, UTC."""
    today = _on(0, at, zone, now)
    return today if today <= now else _on(-1, at, zone, now)


def coming(at: str, zone: str, now: datetime) -> datetime:
    """Return when it will be that local time next, UTC."""
    today = _on(0, at, zone, now)
    return today if today > now else _on(1, at, zone, now)


def _on(days: int, at: str, zone: str, now: datetime) -> datetime:
    where = ZoneInfo(zone)
    day = now.astimezone(where).date() + timedelta(days=days)
    return datetime.combine(day, time.fromisoformat(at), where).astimezone(UTC)
