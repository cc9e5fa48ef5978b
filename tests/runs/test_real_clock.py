"""`tercet run` on the real clock, against instruments in a process of their own."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
from pathlib import Path

from daq.cli import main
from tests.runs.watching import wait_for_rows


def test_a_run_on_the_real_clock_counts_every_visit(measurement, instruments, capsys, tmp_path):
    status = main(["run", str(measurement), "--into", str(tmp_path / "lab"), "--json"])

    figures = json.loads(capsys.readouterr().out)
    assert status == 0
    assert figures["kind"] == "run"
    assert (Path(figures["run"]) / "report.pdf").read_bytes().startswith(b"%PDF")
    assert "<h1>" in (Path(figures["run"]) / "report.html").read_text()
    assert figures["visits_done"] == figures["visits_planned"] == 96
    assert figures["visits_repeated"] == figures["visits_missing"] == 0
    assert figures["kappa"] is not None


def test_a_run_whose_counter_does_not_answer_ends_with_three_and_a_sentence(measurement, capsys, tmp_path):
    status = main(["run", str(measurement), "--into", str(tmp_path / "lab")])

    said = capsys.readouterr().err
    assert status == 3
    assert "nobody answers" in said
    assert "Traceback" not in said


def test_ctrl_c_ends_after_the_stand_and_leaves_a_finished_run(measurement, instruments, tmp_path):
    words = [
        sys.executable,
        "-m",
        "daq",
        "run",
        measurement,
        "--into",
        tmp_path / "lab",
        "--json",
        "--hours",
        "0.05",
    ]
    process = subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    assert process.stderr is not None
    folder = Path(process.stderr.readline().removeprefix("run: ").strip())
    wait_for_rows(folder, 1)

    os.kill(process.pid, signal.SIGINT)
    out, said = process.communicate(timeout=60)

    figures = json.loads(out)
    assert process.returncode == 1
    assert "ending after this stand" in said
    assert figures["finished"]
    assert 0 < figures["visits_done"] < figures["visits_planned"]
    assert figures["visits_done"] % 8 == 0


def test_sigterm_stops_at_once_and_the_run_can_be_resumed(measurement, instruments, tmp_path):
    words = [sys.executable, "-m", "daq", "run", measurement, "--into", tmp_path / "lab", "--json"]
    process = subprocess.Popen(words, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    assert process.stderr is not None
    folder = Path(process.stderr.readline().removeprefix("run: ").strip())

    process.terminate()
    out, _ = process.communicate(timeout=60)
    assert process.returncode == 1
    assert not json.loads(out)["finished"]
    again = subprocess.run(
        [sys.executable, "-m", "daq", "run", "--resume", folder, "--json"],
        capture_output=True,
        text=True,
        check=False,
    )

    figures = json.loads(again.stdout)
    assert again.returncode == 0, again.stderr
    assert figures["finished"]
    assert figures["visits_missing"] == 0


def _by_hand(rig: Path, *lines: str) -> subprocess.CompletedProcess[str]:
    words = [sys.executable, "-m", "daq", "task", "by-hand", str(rig), "--json"]
    typed = "".join(f"{line}\n" for line in lines)
    return subprocess.run(words, input=typed, capture_output=True, text=True, check=False, timeout=60)


def test_a_person_moves_reads_and_watches_by_hand(measurement, instruments):
    rig = measurement.parent / "rigs" / "lantern.toml"

    session = _by_hand(rig, "home", "go ABC", "go detector 99", "rate 0.05 0.2", "where", "end")

    done = json.loads(session.stdout)["done"]
    assert session.returncode == 1
    assert [one["ok"] for one in done] == [True, True, False, True, True]
    assert "leaves -15 .. 15 mm; not sent" in done[2]["said"]
    assert "/s" in done[3]["said"] and done[4]["said"].startswith("detector ")
    assert session.stderr.count("####") >= 2


def test_a_device_in_the_hands_of_one_program_is_refused_to_another(measurement, instruments, tmp_path):
    rig = measurement.parent / "rigs" / "lantern.toml"
    words = [sys.executable, "-m", "daq", "task", "by-hand", rig]
    with subprocess.Popen(words, stdin=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as first:
        assert first.stderr is not None
        while "in your hands" not in first.stderr.readline():
            assert first.poll() is None

        second = _by_hand(rig, "where")
        first.communicate("end\n")

    assert (first.returncode, second.returncode) == (0, 3)
    assert f"the device is in use by process {first.pid}" in second.stderr


def test_by_hand_on_simulated_devices_that_nobody_serves_says_how_to_serve_them(measurement):
    session = _by_hand(measurement.parent / "rigs" / "lantern.toml")

    assert session.returncode == 3
    assert "nobody answers" in session.stderr and "python -m simulators" in session.stderr


def test_a_real_rig_needs_somebody_who_is_there(measurement, tmp_path):
    rig = measurement.parent / "rigs" / "lantern.toml"
    (tmp_path / "real.toml").write_text(rig.read_text().split("\n[bench]")[0])

    session = _by_hand(tmp_path / "real.toml", "home")

    assert session.returncode == 1
    assert "nobody has said to be at the bench; nothing was opened" in session.stderr
