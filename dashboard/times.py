"""Times of day and lengths of time as a person reads them, in UTC."""

from __future__ import annotations

from datetime import datetime

# Not strftime: the month's name must not hang on the locale of the computer.
_MONTHS = (
    *("January", "February", "March", "April", "May", "June", "July"),
    *("August", "September", "October", "November", "December"),
)


def clock(utc: str, seconds: bool = False) -> str:
    """Return the time of day of an ISO date in UTC, "2026-12-01T06:37:00Z" -> "06:37 UTC"."""
    return f"{datetime.fromisoformat(utc):{'%H:%M:%S' if seconds else '%H:%M'}} UTC"


def day_and_clock(utc: str) -> str:
    """Return a date with its time of day in UTC, "2026-12-01T06:37:00Z" -> "1 December, 06:37 UTC"."""
    date = datetime.fromisoformat(utc)
    return f"{date.day} {_MONTHS[date.month - 1]}, {clock(utc)}"


def duration(seconds: float) -> str:
    """Return a length of time in the words of a clock, 5400 -> "1 h 30 min"; seconds below two minutes."""
    if seconds < 120:
        return f"{seconds:.0f} s"
    hours, minutes = divmod(round(seconds / 60), 60)
    return f"{hours} h {minutes} min" if hours else f"{minutes} min"
