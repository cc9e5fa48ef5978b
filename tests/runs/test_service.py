"""The service in a process of its own: a booked rehearsal starts, a second service is refused."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
from datetime import datetime, timedelta
from pathlib import Path
from zoneinfo import ZoneInfo

import pytest

from daq.cli import main
from daq.errors import StorageError
from daq.service.bookings import GOING_ON
from daq.service.load import load
from daq.service.owner import owned, refuse_owned
from daq.storage.feed import DESK, read_feed
from daq.storage.lab_book import insert, select
from daq.storage.log import read_log
from tests.examples import CONFIGS
from tests.runs.watching import wait_for_rows

ZONE = "Europe/Berlin"


def service(lab: Path) -> subprocess.Popen[str]:
    words: list[str | Path] = [sys.executable, "-m", "daq", "serve", lab, "--no-page", "--json"]
    return subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def wait_for_start(lab: Path, *, outcome: bool = True) -> dict:
    """Return the first booked start, once it has ended or, without `outcome`, once it was begun."""
    until_s = time.monotonic() + 90
    while time.monotonic() < until_s:
        found = [one for one in select(lab, "starts") if not outcome or one["outcome"] != GOING_ON]
        if found:
            return found[0]
    raise AssertionError("no booked start was dealt with")


def wait_for_event(folder: Path, event: str) -> None:
    until_s = time.monotonic() + 120
    while time.monotonic() < until_s:
        if any(entry["event"] == event for entry in read_log(folder)):
            return
    raise AssertionError(f"the log never said {event!r}")


def wait_for_lock(lab: Path) -> None:
    until_s = time.monotonic() + 120
    while time.monotonic() < until_s:
        try:
            refuse_owned(lab)
        except StorageError:
            return
    raise AssertionError("no service took the lab")


def book(lab: Path, at: datetime, *more: str) -> None:
    words = ["book", str(lab), str(CONFIGS / "lantern.toml"), "--at", at.strftime("%H:%M:%S"), "--zone", ZONE]
    more = more if "--hours" in more else ("--hours", "0.6", *more)
    assert main([*words, "--first-day", at.date().isoformat(), *more]) == 0


def soon(seconds: float) -> datetime:
    """Return a moment so many seconds from now; what a booking has to import is imported before."""
    load(CONFIGS / "lantern.toml").itinerary()
    return datetime.now(ZoneInfo(ZONE)) + timedelta(seconds=seconds)


def ended(process: subprocess.Popen[str]) -> dict:
    """Ask a service to leave and return what it did."""
    process.send_signal(signal.SIGINT)
    out, _ = process.communicate(timeout=120)
    return dict(json.loads(out))


def test_a_booked_rehearsal_starts_by_itself_and_its_outcome_is_written_down(tmp_path, capsys):
    book(tmp_path, soon(3))
    process = service(tmp_path)

    start = wait_for_start(tmp_path)
    process.send_signal(signal.SIGINT)
    out, _ = process.communicate(timeout=30)

    assert start["outcome"] == "complete"
    assert (tmp_path / "runs" / start["run"] / "run.zarr").is_dir()
    assert json.loads(out) == {"resumed": 0, "started": 1}
    assert process.returncode == 0


def test_what_an_operator_books_on_the_page_is_booked_by_the_service(tmp_path):
    at = datetime.now(ZoneInfo(ZONE)) + timedelta(days=2)
    book(tmp_path, at)
    file = str((CONFIGS / "lantern.toml").resolve())
    wanted = json.dumps({"file": file, "day": "2036-12-03", "at": "19:00", "end_by": ""})
    process = service(tmp_path)

    insert(tmp_path, "requests", run="", what="book", who="Night watch", utc="now", about=wanted)
    until_s = time.monotonic() + 60
    while len(told := (read_feed(tmp_path, DESK) or {"bookings": []})["bookings"]) < 2:
        assert time.monotonic() < until_s, "the service never booked it"

    ended(process)
    assert [one["who"] for one in told] == [told[0]["who"], "Night watch"]
    assert told[1]["next_utc"] == "2036-12-03T18:00:00+00:00"


def test_an_operator_ends_the_run_and_not_the_service(tmp_path):
    book(tmp_path, soon(2), "--hours", "10")
    process = service(tmp_path)
    run = wait_for_start(tmp_path, outcome=False)["run"]
    wait_for_rows(tmp_path / "runs" / run, 8)

    main(["end", str(tmp_path)])
    start = wait_for_start(tmp_path)
    going = process.poll() is None

    assert going
    assert start["outcome"] == "ended at request after a stand"
    assert ended(process)["started"] == 1


def test_a_booked_run_is_started_once_though_its_service_is_killed_and_it_ends_by_its_time(tmp_path):
    book(tmp_path, soon(2), "--hours", "10")
    process = service(tmp_path)
    run = wait_for_start(tmp_path, outcome=False)["run"]
    wait_for_rows(tmp_path / "runs" / run, 8)
    process.kill()
    process.communicate(timeout=30)

    second = service(tmp_path)
    wait_for_event(tmp_path / "runs" / run, "run goes on")
    first_end = ended(second)
    third = service(tmp_path)
    wait_for_lock(tmp_path)
    last_end = ended(third)

    (start,) = select(tmp_path, "starts")
    assert start["outcome"] == "ended at request after a stand"
    assert (first_end, last_end) == ({"resumed": 1, "started": 0}, {"resumed": 0, "started": 0})
    assert [folder.name for folder in (tmp_path / "runs").iterdir()] == [run]


@pytest.mark.parametrize("command", ["run", "rehearse"])
def test_a_run_by_hand_in_a_lab_that_a_service_owns_is_refused(tmp_path, capsys, command):
    with owned(tmp_path):
        status = main([command, str(CONFIGS / "lantern.toml"), "--into", str(tmp_path)])

    assert status == 4
    assert "tercet book" in capsys.readouterr().err
    assert not (tmp_path / "runs").exists()


def test_a_start_that_is_too_late_is_not_made_up_for(tmp_path, capsys):
    book(tmp_path, datetime.now(ZoneInfo(ZONE)) - timedelta(minutes=5), "--late-min", "1", "--on", "daily")
    main(["bookings", str(tmp_path), "--json"])

    (booking,) = json.loads(capsys.readouterr().out.splitlines()[-1])["bookings"]

    assert datetime.fromisoformat(booking["next_utc"]) > datetime.now().astimezone() + timedelta(hours=22)
    assert select(tmp_path, "starts") == []


def test_two_services_on_one_lab_are_refused_naming_the_holder(tmp_path):
    first = service(tmp_path)
    try:
        wait_for_lock(tmp_path)
        words = [sys.executable, "-m", "daq", "serve", str(tmp_path), "--port", "0"]
        second = subprocess.run(words, capture_output=True, text=True, timeout=60, check=False)
    finally:
        first.send_signal(signal.SIGINT)
        first.communicate(timeout=30)

    assert second.returncode == 4
    assert f"process {first.pid}" in second.stderr
    assert "page:" not in second.stdout  # no address of a page that will never be


def test_a_lab_folder_that_is_a_file_is_a_sentence(tmp_path, capsys):
    (tmp_path / "lab").write_text("no folder")

    status = main(["serve", str(tmp_path / "lab"), "--no-page"])

    assert status == 4
    assert "Choose another lab folder" in capsys.readouterr().err
