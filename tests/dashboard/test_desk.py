"""What the page says of a lab's bookings."""

from __future__ import annotations

from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

from daq.storage.feed import DESK, write_feed
from daq.storage.people import NOBODY, Person
from dashboard.desk import OLD_AFTER_S, desk_stamp, desk_view

NOW = datetime(2026, 12, 1, 12, tzinfo=UTC)
OPERATOR = Person("Night watch", "operator")
BOOKING: dict[str, Any] = {
    "number": 3,
    "name": "lantern",
    "days": ["mon", "fri"],
    "at": "18:30",
    "zone": "Europe/Berlin",
    "end_at": "08:00",
    "next_utc": "2026-12-04T17:30:00+00:00",
    "who": "Kim",
    "ready": "not armed",
}
DESK_TOLD: dict[str, Any] = {
    "format": 1,
    "written_utc": NOW.isoformat(),
    "bookings": [BOOKING],
    "files": [{"file": "/lab/lantern.toml", "name": "lantern"}],
    "starts": [{"booking": 3, "due_utc": "2026-11-30T17:30:00+00:00", "outcome": "complete", "run": "x"}],
}


def stamp(folder: Path, now: datetime = NOW, **changed: Any) -> str:
    write_feed(folder, DESK_TOLD | changed, DESK)
    return desk_stamp(folder, now)


def test_a_booking_is_a_sentence_with_its_next_start_and_whether_it_is_armed(tmp_path: Path) -> None:
    said = desk_view(stamp(tmp_path), OPERATOR)

    assert said is not None
    (line,) = said["lines"]
    assert line["says"] == (
        "lantern: mon, fri at 18:30 Europe/Berlin, over by 08:00; next start 4 December, 17:30 UTC. "
        "Booked by Kim."
    )
    assert line["ready"].startswith("Not armed")
    assert line["cancel"]["about"] == "3"
    assert said["starts"] == ["Complete (30 November, 17:30 UTC)."]


def test_whoever_is_no_operator_reads_only(tmp_path: Path) -> None:
    said = desk_view(stamp(tmp_path), NOBODY)

    assert said is not None
    assert said["form"] is None
    assert said["lines"][0]["cancel"] is None


def test_a_service_that_is_silent_starts_nothing_and_takes_no_booking(tmp_path: Path) -> None:
    said = desk_view(stamp(tmp_path, NOW + timedelta(seconds=OLD_AFTER_S + 1)), OPERATOR)

    assert said is not None
    assert "nothing that is booked will start" in said["says"]
    assert said["form"] is None


def test_the_stamp_stays_while_nothing_but_the_time_changes(tmp_path: Path) -> None:
    first = stamp(tmp_path)
    later = NOW + timedelta(seconds=5)

    assert stamp(tmp_path, later, written_utc=later.isoformat()) == first


def test_a_lab_without_a_service_says_nothing(tmp_path: Path) -> None:
    assert desk_view(desk_stamp(tmp_path, NOW), OPERATOR) is None
    assert desk_view(stamp(tmp_path, format=2), OPERATOR) is None


def test_a_description_that_cannot_be_read_is_told(tmp_path: Path) -> None:
    said = desk_view(stamp(tmp_path, bookings=[BOOKING | {"ready": "it is no TOML"}]), OPERATOR)

    assert said is not None
    assert said["lines"][0]["ready"] == "Cannot start: it is no TOML"
