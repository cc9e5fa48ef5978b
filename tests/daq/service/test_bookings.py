from datetime import UTC, datetime
from typing import Any

import pytest

from daq.errors import DescriptionError, StorageError
from daq.service.bookings import (
    GOING_ON,
    book,
    bookings,
    cancel,
    dealt_with,
    end_of,
    note_outcome,
    note_start,
    start_of,
)
from daq.service.load import Wishes
from daq.service.owner import owned
from tests.examples import CONFIGS


def make(lab, **changes):
    words: dict[str, Any] = {
        "days": ["mon", "fri"],
        "at": "18:30",
        "zone": "Europe/Berlin",
        "first_day": "2026-12-01",
        "late_s": 3600.0,
        "end_at": "08:00",
        "wishes": Wishes(hours=2.0),
        "who": "night watch",
        "now": datetime(2026, 12, 1, 8, 0, tzinfo=UTC),
    }
    return book(lab, CONFIGS / "lantern.toml", **(words | changes))


def test_a_booking_comes_back_as_it_was_made(tmp_path):
    made = make(tmp_path)

    assert bookings(tmp_path) == [made]


def test_a_cancelled_booking_is_gone(tmp_path):
    made = make(tmp_path)

    cancel(tmp_path, made.number)

    assert bookings(tmp_path) == []


def test_cancelling_what_is_not_booked_says_so(tmp_path):
    with pytest.raises(DescriptionError, match="no booking 7"):
        cancel(tmp_path, 7)


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"days": ["someday"]}, "weekdays like mon,fri"),
        ({"days": ["daily", "mon"]}, "weekdays like mon,fri"),
        ({"at": "half past six"}, "a time like 18:30"),
        ({"end_at": "late"}, "a time like 18:30"),
        ({"zone": "Nowhere/Land"}, "no time zone"),
        ({"first_day": "tomorrow"}, "a date like"),
        ({"late_s": -60.0}, "--late-min"),
        ({"late_s": float("nan")}, "--late-min"),
        ({"end_at": "18:30"}, "the time of the start"),
        ({"days": ["once"], "first_day": "2026-11-30"}, "is past"),
    ],
)
def test_a_booking_that_cannot_be_read_is_refused_before_it_is_kept(tmp_path, changes, words):
    with pytest.raises(DescriptionError, match=words):
        make(tmp_path, **changes)

    assert bookings(tmp_path) == []


def test_a_run_is_over_by_the_next_local_end(tmp_path):
    made = make(tmp_path)
    evening = datetime(2026, 12, 4, 17, 30, tzinfo=UTC)

    assert end_of(made, evening) == datetime(2026, 12, 5, 7, 0, tzinfo=UTC)


def test_a_run_that_starts_after_midnight_is_over_the_same_morning(tmp_path):
    made = make(tmp_path)

    assert end_of(made, datetime(2026, 12, 5, 1, 0, tzinfo=UTC)) == datetime(2026, 12, 5, 7, 0, tzinfo=UTC)


def test_the_outcome_of_a_start_is_written_to_its_run(tmp_path):
    made = make(tmp_path)
    note_start(tmp_path, made, datetime(2026, 12, 4, 17, 30, tzinfo=UTC), GOING_ON, "a run")

    note_outcome(tmp_path, "a run", "complete")
    note_outcome(tmp_path, "a run that nobody booked", "complete")

    started = start_of(tmp_path, "a run")
    assert started is not None
    assert (started["booking"], started["outcome"]) == (made.number, "complete")
    assert start_of(tmp_path, "a run that nobody booked") is None


def test_a_start_is_dealt_with_once(tmp_path):
    made = make(tmp_path)
    due = datetime(2026, 12, 4, 17, 30, tzinfo=UTC)

    note_start(tmp_path, made, due, "complete", "a run")

    assert dealt_with(tmp_path, made, due)
    with pytest.raises(StorageError):
        note_start(tmp_path, made, due, "complete", "another run")


def test_a_second_service_is_refused_with_the_name_of_the_first(tmp_path):
    with (
        owned(tmp_path),
        pytest.raises(StorageError, match=r"owns this lab already: process \d+"),
        owned(tmp_path),
    ):
        raise AssertionError("two services own one lab")


def test_a_lab_is_free_again_when_its_service_has_ended(tmp_path):
    with owned(tmp_path):
        pass

    with owned(tmp_path):
        assert (tmp_path / "service.lock").exists()
