"""A rehearsal takes its drift from a pilot or from a run of the past, and says what the plan had said."""

from __future__ import annotations

import json
import shutil
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from daq.cli import main
from daq.service.drift import levels_of
from tests.examples import CONFIGS

HOUR_S = 3600.0


@pytest.fixture(scope="module")
def bench(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a folder with a short night whose source falls by 20 % an hour."""
    folder = tmp_path_factory.mktemp("bench")
    shutil.copytree(CONFIGS / "rigs", folder / "rigs")
    rig = folder / "rigs" / "lantern.toml"
    rig.write_text(rig.read_text().replace("linear_per_hour = -0.03", "linear_per_hour = -0.2"))
    text = (CONFIGS / "lantern.toml").read_text().replace("number = 41", "number = 10")
    (folder / "night.toml").write_text(text.replace("laps = 38", "laps = 8"))
    pilot = np.random.default_rng(3).poisson(88_000 * np.exp(np.cumsum(np.full(300, 1e-4))))
    (folder / "piloted.toml").write_text(
        text.replace("laps = 38", "laps = 4") + f"\n[pilot]\nsample_s = 1.0\ncounts = {pilot.tolist()}\n"
    )
    return folder


def rehearse(file: Path, lab: Path, capsys, *words: str) -> dict[str, Any]:
    capsys.readouterr()
    assert (
        main(["rehearse", str(file), "--link", "direct", "--seed", "7", "--into", str(lab), "--json", *words])
        == 0
    )
    return dict(json.loads(capsys.readouterr().out))


def fall_per_hour(run: str) -> float:
    time_s, level = np.array(levels_of(Path(run))).T
    return float(np.polyfit(time_s / HOUR_S, np.log(level), 1)[0])


def test_a_rehearsal_drifts_as_the_run_did_that_it_was_told_to_follow(bench, tmp_path, capsys):
    past = rehearse(bench / "night.toml", tmp_path, capsys)
    (bench / "rigs" / "lantern.toml").write_text((CONFIGS / "rigs" / "lantern.toml").read_text())

    again = rehearse(bench / "night.toml", tmp_path, capsys, "--drift", past["run"])
    without = rehearse(bench / "night.toml", tmp_path, capsys)

    falls = [fall_per_hour(one["run"]) for one in (past, again, without)]
    assert falls[0] < -0.15
    assert falls[1] == pytest.approx(falls[0], abs=0.02)
    assert falls[2] > -0.1
    assert (Path(again["run"]) / "levels.json").exists()
    assert main(["verify", again["run"]]) == 0


def test_a_rehearsal_drifts_as_its_pilot_says_and_the_report_gives_the_planned_bar(bench, tmp_path, capsys):
    figures = rehearse(bench / "piloted.toml", tmp_path, capsys, "--drift", "pilot")
    main(["report", figures["run"]])
    told = capsys.readouterr().out

    assert f"the plan said ± {figures['planned_se']:.2e}" in told
    assert (Path(figures["run"]) / "levels.json").exists()


@pytest.mark.parametrize(
    ("drift", "status", "words"),
    [("pilot", 2, "has no table [pilot]"), ("nowhere", 4, "there is no such run")],
)
def test_a_drift_that_cannot_be_had_is_a_sentence(bench, tmp_path, capsys, drift, status, words):
    found = main(["rehearse", str(bench / "night.toml"), "--drift", drift, "--into", str(tmp_path / "lab")])

    assert found == status
    assert words in capsys.readouterr().err
    assert not (tmp_path / "lab").exists()
