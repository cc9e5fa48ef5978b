"""A rig belongs to one program at a time: another one is refused, named the holder, and disturbs nothing."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from daq.cli import main
from daq.service.arming import digest_of
from daq.service.load import load
from daq.storage.lab_book import insert, select
from tests.runs.watching import wait_for_rows

DAQ = [sys.executable, "-m", "daq"]
TEXT: dict[str, Any] = {"stdin": subprocess.PIPE, "stderr": subprocess.PIPE, "text": True}


@pytest.fixture
def real(measurement: Path, instruments: subprocess.Popen[str]) -> Path:
    """Return the measurement on a rig without a bench: the program takes it for real."""
    rig = measurement.parent / "rigs" / "lantern.toml"
    text = rig.read_text()
    (rig.parent / "real.toml").write_text(text[: text.index("\n[bench]")])
    file = measurement.parent / "real.toml"
    file.write_text(measurement.read_text().replace('"rigs/lantern.toml"', '"rigs/real.toml"'))
    return file


@pytest.fixture
def first(real: Path, tmp_path: Path) -> Iterator[subprocess.Popen[str]]:
    """Carry out a run in a process of its own."""
    words = [*DAQ, "run", str(real), "--into", str(tmp_path / "first"), "--json", "--hours", "0.05"]
    with subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        assert process.stderr is not None
        try:
            wait_for_rows(Path(process.stderr.readline().removeprefix("run: ").strip()), 8)
            yield process
        finally:
            process.kill()


def arm_and_book(lab: Path, file: Path, at: datetime) -> None:
    """Book a start in UTC, armed as if somebody had answered the cautions."""
    when = ["--at", f"{at:%H:%M:%S}", "--zone", "UTC", "--first-day", f"{at:%Y-%m-%d}"]
    assert main(["book", str(lab), str(file), *when]) == 0
    armed = {"sha256": digest_of(load(file)), "who": "night watch", "utc": at.isoformat()}
    insert(lab, "armings", file="lantern", **armed, expires_utc=(at + timedelta(hours=1)).isoformat())


def outcome(lab: Path) -> str:
    """Return what became of the first booked start."""
    until_s = time.monotonic() + 60
    while not (starts := select(lab, "starts")):
        assert time.monotonic() < until_s, "no start was dealt with"
    return str(starts[0]["outcome"])


def ended(first: subprocess.Popen[str]) -> dict:
    """Ask the first run to end after its stand and return its figures."""
    first.send_signal(signal.SIGINT)
    out, _ = first.communicate(timeout=60)
    return dict(json.loads(out))


def test_another_run_a_task_and_a_booked_start_are_refused_and_the_first_run_is_not_disturbed(
    real, first, tmp_path
):
    second, lab = tmp_path / "second", tmp_path / "lab"
    load(real).itinerary()  # what a booking has to import is imported before
    arm_and_book(lab, real, datetime.now(UTC) + timedelta(seconds=2))

    with (
        subprocess.Popen([*DAQ, "serve", lab, "--no-page"], stdout=subprocess.DEVNULL) as service,
        subprocess.Popen([*DAQ, "run", real, "--into", second], **TEXT) as run,
        subprocess.Popen([*DAQ, "task", "dark", real, "--into", second], **TEXT) as task,
    ):
        try:
            said = [run.communicate(timeout=60)[1], task.communicate("here\n", timeout=60)[1], outcome(lab)]
        finally:
            for process in (run, task, service):
                process.terminate()
    figures = ended(first)

    assert (run.returncode, task.returncode) == (3, 3)
    for words in said:
        assert f"the device is in use by process {first.pid} (" in words
        assert "Traceback" not in words
    assert not list(tmp_path.glob("second/*/*")) and not list(lab.glob("runs/*"))
    assert (figures["ended"], figures["visits_repeated"]) == ("ended at request after a stand", 0)
    assert figures["visits_done"] % 8 == 0
