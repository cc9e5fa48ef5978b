"""A whole simulated day through the command line: bench tasks, the plan from them, rehearsal, report."""

from __future__ import annotations

import json
import shutil
from pathlib import Path
from typing import Any

import pytest

from daq import open_visits
from daq.cli import main
from daq.records import CLOSED_VISIT, FLANK_VISIT
from tests.examples import CONFIGS


@pytest.fixture(scope="module")
def day(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a folder with a short night on the Lantern bench, its bench tasks done."""
    folder = tmp_path_factory.mktemp("day")
    shutil.copytree(CONFIGS / "rigs", folder / "rigs")
    text = (CONFIGS / "lantern.toml").read_text()
    text = text.replace("number = 41", "number = 9").replace("laps = 38", "laps = 20")
    (folder / "night.toml").write_text(text)
    for task in ("dark", "pilot", "register", "dry-lap"):
        assert main(["task", task, str(folder / "night.toml"), "--into", str(folder / "lab")]) == 0
    return folder


def told(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, dict[str, Any]]:
    status = main([*words, "--json"])
    return status, json.loads(capsys.readouterr().out.splitlines()[-1])


def test_the_plan_takes_the_records_and_says_which(day: Path, capsys: pytest.CaptureFixture[str]) -> None:
    plan = day / "tonight.toml"

    status, figures = told(
        capsys, "compose", str(day / "night.toml"), "--bench", str(day / "lab"), "--write", str(plan)
    )
    _, again = told(capsys, "compose", str(plan))

    assert status == 0
    assert any(note.startswith("The drift is that of pilot/") for note in figures["notes"])
    assert any(note.startswith("The openings stand where register/") for note in figures["notes"])
    assert "at_mm = 4.00" in (day / "tonight-rig.toml").read_text()
    assert again["kappa_se"] == pytest.approx(figures["kappa_se"])


def test_the_night_meets_its_forecast_and_its_record_quotes_the_bench(
    day: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    plan = day / "tonight.toml"
    told(capsys, "compose", str(day / "night.toml"), "--bench", str(day / "lab"), "--write", str(plan))
    _, expected = told(capsys, "compose", str(plan))

    status, night = told(capsys, "rehearse", str(plan), "--link", "direct", "--into", str(day / "lab"))

    assert status == 0
    assert night["kappa_counting_se"] == pytest.approx(expected["kappa_counting_se"], rel=0.03)
    # the jackknife over 10 pairs: chi with 9 degrees of freedom, 95 % between 0.548 and 1.454
    assert 0.548 < night["kappa_se"] / expected["kappa_se"] < 1.454
    assert abs(night["kappa"] - night["truth_kappa"]) < 4 * night["kappa_se"]
    quoted = json.loads((Path(night["run"]) / "record.json").read_text())["bench_records"]
    assert {"dark", "pilot", "register", "dry-lap"} <= set(quoted)
    assert main(["report", night["run"]]) == 0
    page = (Path(night["run"]) / "report.html").read_text()
    assert "The drift is that of pilot/" in page
    assert "The openings stand where register/" in page


def test_after_eleven_minutes_without_a_link_flanks_and_dark_are_looked_at_first(
    day: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    fault = '[[fault]]\nkind = "drop"\ndevice = "stages"\nseconds = 660.0\nat_s = 400.0\n'
    (day / "faults.toml").write_text(fault)
    lab = str(day / "lab")

    status, night = told(
        capsys,
        *("rehearse", str(day / "night.toml"), "--faults", str(day / "faults.toml")),
        *("--link", "direct", "--into", lab),
    )
    _, sound = told(capsys, "verify", night["run"])
    _, again = told(capsys, "replay", night["run"], "--into", str(day / "again"))
    assert main(["report", night["run"]]) == 0

    assert status == 0
    visits = open_visits(night["run"])
    unplanned = visits["reason"].values[visits["visit"].values < 0].tolist()
    assert unplanned == [FLANK_VISIT] * 4 + [CLOSED_VISIT]
    assert (sound["ok"], again["same_digest"]) == (True, True)
    said = json.loads((Path(night["run"]) / "report.json").read_text())["happened"]
    (ready,) = (one["text"] for one in said if "without a count" in one["text"])
    assert "A stands" in ready and "off its middle" in ready and "by dark/" in ready
    assert "min without a count: A stands" in (Path(night["run"]) / "report.html").read_text()
