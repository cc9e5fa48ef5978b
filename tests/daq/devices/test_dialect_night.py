"""A whole rehearsal on a rig whose stages speak dialects: the same counts as with a driver in Python."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from daq.cli import main
from tests.examples import CONFIGS

GAUGE = """
[devices.gauge]
driver = "dialect"
dialect = "../dialects/text-gauge.toml"
address = "tcp://127.0.0.1:7804"

[bench.instruments]
stages = "{stages}"
gauge = "gauge"
"""


def night(folder: Path, stages: str | None) -> None:
    """Rehearse two laps over three positions, in a folder of its own."""
    rig = (CONFIGS / "rigs" / "lantern.toml").read_text()
    (folder / "rigs").mkdir(parents=True)
    if stages is not None:
        driver = f'driver = "dialect"\ndialect = "../dialects/{stages}.toml"'
        rig = rig.replace('driver = "gcode-stage"', driver)
    rig += GAUGE.format(stages="scpi-stage" if stages == "scpi-stage" else "gcode-stage")
    (folder / "dialects").mkdir()
    for file in (CONFIGS / "dialects").iterdir():
        (folder / "dialects" / file.name).write_bytes(file.read_bytes())
    (folder / "rigs" / "lantern.toml").write_text(rig)
    text = (CONFIGS / "lantern.toml").read_text()
    text = text.replace("number = 41", "number = 3").replace("laps = 38", "laps = 2")
    (folder / "night.toml").write_text(text)
    words = [
        "rehearse",
        str(folder / "night.toml"),
        "--link",
        "direct",
        "--into",
        str(folder / "lab"),
        "--json",
    ]
    assert main(words) == 0


@pytest.fixture
def plain(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> dict[str, Any]:
    night(tmp_path / "plain", None)
    figures: dict[str, Any] = json.loads(capsys.readouterr().out)
    return figures


@pytest.mark.parametrize("stages", ["gcode-words", "scpi-stage"])
def test_a_night_in_dialects_counts_what_a_night_with_drivers_counts(
    stages: str, plain: dict[str, Any], tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    night(tmp_path / "spoken", stages)
    figures = json.loads(capsys.readouterr().out)

    assert figures["visits_done"] == figures["visits_planned"] == 48
    assert figures["digest"] == plain["digest"]
    kept = Path(figures["run"]) / "dialects" / f"{stages}.toml"
    assert kept.read_bytes() == (CONFIGS / "dialects" / f"{stages}.toml").read_bytes()


def test_what_is_wrong_with_a_dialect_is_told_with_its_file_and_key(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    (tmp_path / "rigs").mkdir()
    rig = (CONFIGS / "rigs" / "lantern.toml").read_text()
    (tmp_path / "rigs" / "lantern.toml").write_text(
        rig.replace('driver = "gcode-stage"', 'driver = "dialect"\ndialect = "mine.toml"')
    )
    stage = (CONFIGS / "dialects" / "gcode-words.toml").read_text()
    (tmp_path / "rigs" / "mine.toml").write_text(stage.replace("[command.stop]", "[command.halt]"))
    (tmp_path / "lantern.toml").write_text((CONFIGS / "lantern.toml").read_text())

    assert main(["check", str(tmp_path / "lantern.toml")]) == 2

    said = capsys.readouterr().err
    assert "mine.toml, command.stop: a stage needs this command" in said
    assert "mine.toml, command.halt: a stage has no such command" in said
