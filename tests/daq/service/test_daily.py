"""A lab's day in words, and the word before a night with a run in it: once, at its local time."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import UTC, date, datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import pytest
from aiosmtpd.controller import Controller

from daq.service.bookings import Booking, book
from daq.service.calendar import coming, latest
from daq.service.daily import evening_word, summary_of
from daq.service.load import Wishes
from daq.service.messages import by_apprise, post_evening, send_urgent
from daq.service.settings import Messages
from daq.storage.lab_book import insert
from tests.examples import CONFIGS
from tests.mail import address_of, mail_server

ZONE = "Europe/Berlin"
EVENING = datetime(2036, 12, 1, 21, 0, tzinfo=UTC)  # 22:00 there
STARTED = EVENING - timedelta(hours=5)


@pytest.fixture
def server() -> Iterator[Controller]:
    with mail_server() as controller:
        yield controller


def to(controller: Controller | None = None, evening_at: str = "22:00") -> Messages:
    address = (
        "mailto://host?from=a@lab.example&to=b@lab.example" if controller is None else address_of(controller)
    )
    return Messages(urgent=(address,), zone=ZONE, evening_at=evening_at)


def booked(lab: Path, at: str, file: Path = CONFIGS / "lantern.toml") -> Booking:
    return book(
        lab,
        file,
        days=["once"],
        at=at,
        zone=ZONE,
        first_day=date(2036, 12, 1).isoformat(),
        late_s=600,
        end_at=None,
        wishes=Wishes(),
        who="Kim",
        now=STARTED,
    )


def real(folder: Path) -> Path:
    """Write a measurement whose rig has no bench: it has to be armed."""
    (folder / "rigs").mkdir()
    rig = (CONFIGS / "rigs" / "lantern.toml").read_text()
    (folder / "rigs" / "lantern.toml").write_text(rig[: rig.index("\n[bench]")])
    (folder / "mine.toml").write_text((CONFIGS / "lantern.toml").read_text())
    return folder / "mine.toml"


def test_the_day_of_a_lab_says_what_ran_what_waits_and_what_is_armed(tmp_path):
    booked(tmp_path, "22:30")
    armed = {"sha256": "", "who": "Kim", "utc": "", "expires_utc": "2036-12-02T17:00:00+00:00"}
    insert(tmp_path, "armings", file="lantern", **armed)
    skipped = {"booking": 7, "due_utc": "2036-12-01T17:30:00+00:00", "utc": STARTED.isoformat()}
    insert(tmp_path, "starts", **skipped, outcome="skipped: nobody has armed it", run=None)

    said = summary_of(tmp_path, ZONE, EVENING)

    assert "Booking 7, due 2036-12-01 18:30 Europe/Berlin: skipped: nobody has armed it." in said
    assert "lantern starts 2036-12-01 22:30 Europe/Berlin (booking 1): simulated." in said
    assert "lantern, by Kim, for one start until 2036-12-02 18:00 Europe/Berlin." in said


def test_an_empty_day_is_said_to_be_empty(tmp_path):
    assert "Nothing is booked." in summary_of(tmp_path, "UTC", EVENING)


@pytest.mark.filterwarnings("ignore:'imghdr' is deprecated:DeprecationWarning")
def test_armed_and_well_is_mailed_once_in_the_evening_before_a_night_with_a_run(tmp_path, server):
    booked(tmp_path, "22:30")
    messages = to(server)

    def look(now: datetime) -> int:
        post_evening(tmp_path, messages, now, STARTED, lambda: evening_word(tmp_path, messages, now))
        return send_urgent(tmp_path, messages, now, by_apprise)

    went = [look(EVENING + timedelta(minutes=minutes)) for minutes in (-1, 0, 5, 50)]

    assert went == [0, 1, 0, 0]
    (mail,) = server.handler.got
    assert "armed and well, next word at 2036-12-02 08:00" in mail.replace("\r\n ", " ").replace("\n ", " ")
    assert "lantern starts 2036-12-01 22:30 Europe/Berlin" in mail


def test_a_start_that_nobody_has_armed_is_said_to_be_not_ready(tmp_path):
    booked(tmp_path / "lab", "22:30", real(tmp_path))

    word = evening_word(tmp_path / "lab", to(), EVENING)

    assert word is not None
    assert word[0].startswith("tercet: NOT ready for the night")
    assert "mine starts 2036-12-01 22:30 Europe/Berlin (booking 1): not armed." in word[1]


@pytest.mark.parametrize(
    ("changes", "late_h", "since"),
    [
        ({"evening_at": ""}, 0.0, STARTED),  # nobody wants it
        ({}, 1.5, STARTED),  # the evening is over
        ({}, 0.1, EVENING + timedelta(minutes=1)),  # the service was not there then
        ({}, 24.0, STARTED),  # nothing starts in that night
    ],
)
def test_otherwise_there_is_no_word_in_the_evening(tmp_path, changes, late_h, since):
    booked(tmp_path, "22:30")
    messages, now = to(**changes), EVENING + timedelta(hours=late_h)

    told = post_evening(tmp_path, messages, now, since, lambda: evening_word(tmp_path, messages, now))

    assert not told


def test_a_local_time_is_found_before_and_after_a_moment_also_where_the_clocks_change():
    noon = datetime(2026, 10, 25, 12, 0, tzinfo=ZoneInfo(ZONE))  # the clocks went back that night

    assert latest("22:00", ZONE, noon) == datetime(2026, 10, 24, 20, 0, tzinfo=UTC)
    assert latest("08:00", ZONE, noon) == datetime(2026, 10, 25, 7, 0, tzinfo=UTC)
    assert coming("22:00", ZONE, noon) == datetime(2026, 10, 25, 21, 0, tzinfo=UTC)
    assert coming("08:00", ZONE, noon) == datetime(2026, 10, 26, 7, 0, tzinfo=UTC)
