"""What goes wrong at the bench, through the command line: a sentence each, and nothing is moved further."""

from __future__ import annotations

import json
import shutil
from pathlib import Path
from typing import Any

import pytest

from daq import open_visits
from daq.cli import main
from tests.examples import CONFIGS

NO_FRINGE = "\n[bench.light]\nvisibility = { AB = 0.0, BC = 0.0, AC = 0.0 }\n"
NO_WINDOW = 'missing = ["A", "B", "C", "AB", "AC", "BC", "ABC"]\n'


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Return a folder with a short and narrow Lantern night and its rig."""
    shutil.copytree(CONFIGS / "rigs", tmp_path / "rigs")
    shutil.copy(CONFIGS / "lantern.toml", tmp_path / "night.toml")
    narrow = (("start_mm = -12.8", "start_mm = -4.8"), ("stop_mm = 12.8", "stop_mm = 4.8"))
    changed(tmp_path / "night.toml", *narrow, ("number = 41", "number = 13"), ("goal_se = 1e-4", ""))
    return tmp_path


def changed(path: Path, *changes: tuple[str, str]) -> None:
    text = path.read_text()
    for old, new in changes:
        assert old in text, old
        text = text.replace(old, new, 1)
    path.write_text(text)


def done(
    capsys: pytest.CaptureFixture[str], folder: Path, task: str, *more: str
) -> tuple[int, dict[str, Any], str]:
    """Carry out a task; return its exit status, its record where there is one, and what it said."""
    status = main(["task", task, str(folder / "night.toml"), "--into", str(folder / "lab"), "--json", *more])
    told = capsys.readouterr()
    record = json.loads(told.out.splitlines()[-1]) if told.out else {}
    return status, record, told.err


def stands_mm(folder: Path) -> dict[str, float]:
    """Return where the axes of the simulated bench were left."""
    (kept,) = (folder / "lab" / "bench").glob("*-simulated.json")
    return {name: axis["place_mm"] for name, axis in json.loads(kept.read_text())["axes"].items()}


def last_stood_mm(folder: Path, record: dict[str, Any]) -> dict[str, float]:
    """Return where the axes stood when the last gate of a task closed."""
    visits = open_visits(folder / "lab" / "bench" / record["record"])
    return {name: float(visits[f"encoder_{name}_close_mm"][-1]) for name in ("mask", "detector")}


def assert_left_there(folder: Path, record: dict[str, Any], visits: int) -> None:
    """Assert that a failed task moved nothing after its last visit, and that its record says why."""
    assert (record["verdict"], record["ok"], record["valid_until"]) == ("fail", False, None)
    assert record["visits"] == visits
    # half the play of the mask's stage, and its scatter, lie between its encoder and where it truly stands
    assert stands_mm(folder) == pytest.approx(last_stood_mm(folder, record), abs=0.01)


def test_a_scan_that_sees_no_window(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    rig = folder / "rigs" / "lantern.toml"
    changed(rig, ("offset_mm = 0.012", f"offset_mm = 100.0\n{NO_WINDOW}"))

    status, record, _ = done(capsys, folder, "register")

    coarse = [ask for ask in record["asked"] if ask["role"] == "coarse"]
    assert status == 1
    assert "no window was seen on the whole travel. Look for the beam" in record["sentence"]
    assert_left_there(folder, record, len(coarse))


def test_a_fit_that_does_not_converge(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    rig = folder / "rigs" / "lantern.toml"
    rig.write_text(rig.read_text() + NO_FRINGE)

    status, record, _ = done(capsys, folder, "scale")

    assert status == 1
    assert "no fringe of about 5.32 mm is seen behind AB: the fit does not converge." in record["sentence"]
    assert_left_there(folder, record, len(record["asked"]))


def test_a_counter_that_overflows(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (folder / "faults.toml").write_text('[[fault]]\nkind = "overflow"\ndevice = "counter"\nat_gate = 4\n')

    status, record, _ = done(capsys, folder, "deadtime", "--faults", str(folder / "faults.toml"))

    assert status == 1
    assert "the counter overflowed" in record["sentence"]
    assert "it is saturated. Take light away" in record["sentence"]
    assert_left_there(folder, record, 3)


@pytest.mark.parametrize(
    ("limit", "said"),
    [
        ("overload_hz = 2e5", "counts a second, 200000 are allowed"),
        ("counter_range = 1e5", "the counter overflowed"),
    ],
)
def test_more_light_than_detector_or_counter_may_have(
    folder: Path, capsys: pytest.CaptureFixture[str], limit: str, said: str
) -> None:
    changed(folder / "night.toml", ("full_range = 0.9", f"{limit}\nfull_range = 0.9"))

    status, record, _ = done(capsys, folder, "pilot")

    assert status == 1
    assert said in record["sentence"]
    assert_left_there(folder, record, 0)


def test_a_record_of_another_chip(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert done(capsys, folder, "register")[0] == 0
    before = stands_mm(folder)
    changed(folder / "rigs" / "lantern.toml", ("lantern-3-01", "lantern-3-02"))

    status, _, said = done(capsys, folder, "backlash")
    composed = main(["compose", str(folder / "night.toml"), "--bench", str(folder / "lab"), "--json"])
    notes = json.loads(capsys.readouterr().out.splitlines()[-1])["notes"]

    why = "it was taken with another chip (lantern-3-01, now lantern-3-02)"
    assert status == 1
    assert why in said and "do that first. Nothing was moved" in said
    assert stands_mm(folder) == before
    assert not (folder / "lab" / "bench" / "backlash").exists()
    assert composed == 0
    assert any(note.startswith("Not used, register/") and why in note for note in notes)


def test_faults_of_real_devices_are_not_scripted(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    rig = folder / "rigs" / "lantern.toml"
    rig.write_text(rig.read_text().partition("\n[bench]")[0])
    (folder / "faults.toml").write_text("")

    status, _, said = done(capsys, folder, "dark", "--faults", str(folder / "faults.toml"))

    assert status == 2
    assert "are real. Leave it out." in said
