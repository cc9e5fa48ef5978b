"""The desk of a lab: what the page is told, and what operators may book there."""

import json
from datetime import UTC, datetime

import pytest

from daq.service.bookings import bookings, note_start
from daq.service.desk import answer_desk, desk, tell_desk
from daq.storage.feed import DESK, read_feed
from daq.storage.lab_book import insert, select
from tests.daq.service.test_bookings import make
from tests.examples import CONFIGS

NOW = datetime(2026, 12, 1, 12, tzinfo=UTC)
LANTERN = str((CONFIGS / "lantern.toml").resolve())


def ask(lab, what, about):
    """Leave a request of the lab and return what became of it."""
    insert(lab, "requests", run="", what=what, who="Night watch", utc="now", about=about)
    answer_desk(lab)
    return select(lab, "requests")[-1]["outcome"]


def test_the_page_is_told_what_is_booked_and_whether_it_can_start(tmp_path):
    make(tmp_path)

    tell_desk(tmp_path)

    told = read_feed(tmp_path, DESK) or {}
    (one,) = told["bookings"]
    assert (one["name"], one["at"], one["end_at"], one["who"]) == ("lantern", "18:30", "08:00", "night watch")
    assert one["ready"] == "simulated"
    assert told["files"] == [{"file": LANTERN, "name": "lantern"}]


def test_bookings_are_told_soonest_first_and_starts_with_what_became_of_them(tmp_path):
    late = make(tmp_path, days=["once"], first_day="2026-12-09")
    soon = make(tmp_path, days=["once"], first_day="2026-12-02")
    note_start(tmp_path, soon, NOW, "skipped: nobody has armed it")

    told = desk(tmp_path, NOW)

    assert [one["number"] for one in told["bookings"]] == [soon.number, late.number]
    assert told["bookings"][0]["next_utc"] == "2026-12-02T17:30:00+00:00"
    assert told["starts"][0]["outcome"] == "skipped: nobody has armed it"


def test_what_was_booked_at_the_bench_is_booked_once_more(tmp_path):
    make(tmp_path)

    outcome = ask(
        tmp_path,
        "book",
        json.dumps({"file": LANTERN, "day": "2036-12-03", "at": "19:00", "end_by": "07:30"}),
    )

    made = bookings(tmp_path)[-1]
    assert outcome == f"booked as {made.number}"
    assert (made.who, made.times.days, made.times.zone.key) == ("Night watch", ("once",), "Europe/Berlin")
    assert made.next_start(NOW) == datetime(2036, 12, 3, 18, tzinfo=UTC)


@pytest.mark.parametrize(
    "about",
    [
        json.dumps({"file": "/etc/passwd", "day": "2036-12-03", "at": "19:00"}),
        json.dumps({"file": LANTERN, "day": "2036-13-03", "at": "19:00"}),
        json.dumps({"file": LANTERN, "day": "2036-12-03", "at": "25:00"}),
        json.dumps({"file": LANTERN}),
        "[]",
        "{",
        "",
    ],
)
def test_what_cannot_be_booked_is_refused_and_nothing_is_booked(tmp_path, about):
    make(tmp_path)

    outcome = ask(tmp_path, "book", about)

    assert outcome.startswith("refused")
    assert len(bookings(tmp_path)) == 1


def test_a_booking_is_cancelled_from_the_page(tmp_path):
    made = make(tmp_path)

    assert ask(tmp_path, "cancel", str(made.number)) == f"booking {made.number} cancelled"
    assert ask(tmp_path, "cancel", "77").startswith("refused")
    assert ask(tmp_path, "fire", "x").startswith("refused")
    assert bookings(tmp_path) == []


def test_an_answered_request_is_not_answered_again(tmp_path):
    make(tmp_path)
    ask(tmp_path, "book", json.dumps({"file": LANTERN, "day": "2036-12-03", "at": "19:00"}))

    answer_desk(tmp_path)

    assert len(bookings(tmp_path)) == 2
