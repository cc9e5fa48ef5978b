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

from daq.cli import main
from daq.storage.lab_book import select
from tests.examples import CONFIGS

ZONE = "Europe/Berlin"


def service(lab: Path) -> subprocess.Popen[str]:
    words: list[str | Path] = [sys.executable, "-m", "daq", "serve", lab, "--no-page", "--json"]
    return subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)


def wait_for_start(lab: Path) -> dict:
    until_s = time.monotonic() + 90
    while time.monotonic() < until_s:
        found = select(lab, "starts")
        if found:
            return found[0]
    raise AssertionError("no booked start was dealt with")


def book(lab: Path, at: datetime, *more: str) -> None:
    words = ["book", str(lab), str(CONFIGS / "lantern.toml"), "--at", at.strftime("%H:%M:%S"), "--zone", ZONE]
    assert main([*words, "--first-day", at.date().isoformat(), "--hours", "0.6", *more]) == 0


def test_a_booked_rehearsal_starts_by_itself_and_its_outcome_is_written_down(tmp_path, capsys):
    book(tmp_path, datetime.now(ZoneInfo(ZONE)) + timedelta(seconds=3))
    process = service(tmp_path)

    start = wait_for_start(tmp_path)
    process.send_signal(signal.SIGINT)
    out, _ = process.communicate(timeout=30)

    assert start["outcome"] == "complete"
    assert (tmp_path / "runs" / start["run"] / "run.zarr").is_dir()
    assert json.loads(out) == {"started": 1}
    assert process.returncode == 0


def test_a_start_that_is_too_late_is_not_made_up_for(tmp_path, capsys):
    book(tmp_path, datetime.now(ZoneInfo(ZONE)) - timedelta(minutes=5), "--late-min", "1", "--on", "daily")
    main(["bookings", str(tmp_path), "--json"])

    (booking,) = json.loads(capsys.readouterr().out.splitlines()[-1])["bookings"]

    assert datetime.fromisoformat(booking["next_utc"]) > datetime.now().astimezone() + timedelta(hours=22)
    assert select(tmp_path, "starts") == []


def test_two_services_on_one_lab_are_refused_naming_the_holder(tmp_path):
    first = service(tmp_path)
    try:
        until_s = time.monotonic() + 30
        while not (tmp_path / "service.lock").exists() and time.monotonic() < until_s:
            pass
        second = service(tmp_path)
        _, said = second.communicate(timeout=30)
    finally:
        first.send_signal(signal.SIGINT)
        first.communicate(timeout=30)

    assert second.returncode == 4
    assert f"process {first.pid}" in said


def test_a_lab_folder_that_is_a_file_is_a_sentence(tmp_path, capsys):
    (tmp_path / "lab").write_text("no folder")

    status = main(["serve", str(tmp_path / "lab"), "--no-page"])

    assert status == 4
    assert "Choose another lab folder" in capsys.readouterr().err
