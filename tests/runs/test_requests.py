"""Requests from another process reach a rehearsal between two stands."""

from __future__ import annotations

import json
import subprocess
import sys
import time

from daq.cli import main
from daq.storage.feed import read_feed
from daq.storage.log import read_log
from tests.runs.watching import begun, wait_for_rows


def wait_for_state(folder, state: str) -> dict:
    until_s = time.monotonic() + 60
    while time.monotonic() < until_s:
        feed = read_feed(folder)
        if feed and feed["state"] == state:
            return feed
    raise AssertionError(f"the run did not become {state}")


def test_a_rehearsal_holds_goes_on_and_ends_as_asked(tmp_path, capsys):
    words = [
        sys.executable,
        "-m",
        "daq",
        "rehearse",
        "--seed",
        "5",
        "--link",
        "direct",
        "--into",
        tmp_path,
        "--json",
    ]
    process = subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, text=True)
    folder = begun(tmp_path, process)
    wait_for_rows(folder, 8)

    assert main(["hold", str(tmp_path), "--by", "night watch"]) == 0
    held = wait_for_state(folder, "holding")
    assert main(["status", str(tmp_path), "--json"]) == 0
    assert main(["resume", str(tmp_path)]) == 0
    wait_for_rows(folder, held["visit"]["number"] + 2)
    assert main(["end", str(tmp_path)]) == 0
    out, _ = process.communicate(timeout=60)

    figures = json.loads(out)
    said = capsys.readouterr().out
    assert "no safety function" in said
    assert process.returncode == 1
    assert figures["visits_done"] % 8 == 0
    assert figures["visits_done"] < figures["visits_planned"]
    assert [e["event"] for e in read_log(folder) if "asked" in e["event"]] == [
        "hold asked",
        "resume asked",
        "end asked",
    ]
    assert json.loads(next(line for line in said.splitlines() if line.startswith("{")))["state"] == "holding"
