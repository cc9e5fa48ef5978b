"""The three uses in one go: a night that nobody attends, watched through the page, replayed afterwards."""

from __future__ import annotations

import json
import signal
import subprocess
import sys
import time
import urllib.request
from collections.abc import Iterator
from datetime import datetime, timedelta
from pathlib import Path
from typing import Any
from zoneinfo import ZoneInfo

import pytest

from daq.cli import main
from daq.service.bookings import GOING_ON
from daq.storage.lab_book import select
from daq.storage.log import read_log
from tests.examples import CONFIGS

ZONE, HOURS, LONGEST_S = "Europe/Berlin", "2.2", 150.0


@pytest.fixture
def service(tmp_path: Path) -> Iterator[tuple[subprocess.Popen[str], str]]:
    """Book a night with faults of the bench, own the lab, and give the process and the page's address."""
    at = datetime.now(ZoneInfo(ZONE)) + timedelta(seconds=4)
    words = ["book", str(tmp_path), str(CONFIGS / "lantern.toml"), "--at", at.strftime("%H:%M:%S")]
    more = ["--zone", ZONE, "--first-day", at.date().isoformat(), "--hours", HOURS, "--seed", "7"]
    assert main([*words, *more]) == 0
    command = [sys.executable, "-m", "daq", "serve", str(tmp_path)]
    process = subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True)
    assert process.stdout is not None
    yield process, process.stdout.readline().removeprefix("page: ").strip().rstrip("/")
    process.send_signal(signal.SIGINT)
    process.communicate(timeout=60)


class Browser:
    """Asks a page for news as its script does, from another process, over HTTP."""

    def __init__(self, address: str) -> None:
        self._address = address
        dependencies = json.loads(self._open("/_dash-dependencies"))
        self._output = next(one["output"] for one in dependencies if "strip-data" in one["output"])
        self.strips: list[dict[str, Any]] = []
        self.verdict = ""

    def look(self) -> None:
        """Take in what is new, and keep every rate strip that differs from the one before."""
        ids = [output.rsplit(".", 1) for output in self._output.strip(".").split("...")]
        body = {
            "output": self._output,
            "outputs": [{"id": name, "property": part} for name, part in ids],
            "inputs": [
                {"id": "tick", "property": "n_intervals", "value": 1},
                {"id": "chosen", "property": "data", "value": None},
            ],
            "state": [
                {"id": "address", "property": "pathname", "value": "/"},
                {"id": "seen", "property": "data", "value": None},
            ],
            "changedPropIds": ["tick.n_intervals"],
        }
        answer = json.loads(self._open("/_dash-update-component", json.dumps(body).encode()))["response"]
        self.verdict = json.dumps(answer["verdict"])
        strip = answer.get("strip-data", {}).get("data")
        if strip and strip.get("hours") and strip not in self.strips:
            self.strips.append(strip)

    def _open(self, route: str, body: bytes | None = None) -> bytes:
        headers = {
            "Origin": self._address,
            "Sec-Fetch-Site": "same-origin",
            "Content-Type": "application/json",
        }
        with urllib.request.urlopen(
            urllib.request.Request(self._address + route, body, headers), timeout=10
        ) as answer:
            return bytes(answer.read())


def test_a_night_runs_unattended_is_watched_through_the_page_and_replayed(service, tmp_path, capsys):
    process, address = service
    browser, until_s = Browser(address), time.monotonic() + LONGEST_S

    while not (starts := select(tmp_path, "starts")) or starts[0]["outcome"] == GOING_ON:
        assert process.poll() is None and time.monotonic() < until_s
        browser.look()
    browser.look()
    run = tmp_path / "runs" / starts[0]["run"]
    capsys.readouterr()
    status = main(["replay", str(run), "--into", str(tmp_path / "morning"), "--json"])
    figures = json.loads(capsys.readouterr().out)

    assert starts[0]["outcome"] == "complete"
    assert [entry["event"] for entry in read_log(run)][-1] == "ended"
    assert len(browser.strips) >= 3  # the rates moved while it ran
    assert browser.strips[-1]["hours"][-1] > browser.strips[0]["hours"][-1]
    assert "All four pairs are counted." in browser.verdict
    assert status == 0
    assert figures["same_digest"] and figures["same_times"]
    assert figures["truth_kappa"] == pytest.approx(0.0, abs=1e-12)
    assert abs(figures["kappa"]) < 5 * figures["kappa_se"]
