"""A whole simulated day through the command line: bench tasks, the plan from them, rehearsal, report."""

from __future__ import annotations

import json
import shutil
from pathlib import Path
from typing import Any

import numpy as np
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
    for task in ("dark", "pilot", "register", "backlash", "dry-lap"):
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


@pytest.fixture(scope="module")
def night(day: Path) -> Path:
    """Return the run of the night that the records of the day planned, its report beside it."""
    plan = str(day / "tonight.toml")
    assert main(["compose", str(day / "night.toml"), "--bench", str(day / "lab"), "--write", plan]) == 0
    assert main(["rehearse", plan, "--link", "direct", "--into", str(day / "lab")]) == 0
    (run,) = (day / "lab" / "runs").iterdir()
    assert main(["report", str(run)]) == 0
    return run


def reported(run: Path) -> dict[str, Any]:
    """Return the facts of a morning report."""
    return dict(json.loads((run / "report.json").read_text()))


def test_the_night_meets_its_forecast_and_its_record_quotes_the_bench(
    day: Path, night: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    _, expected = told(capsys, "compose", str(day / "tonight.toml"))
    found = reported(night)

    assert found["kappa_counting_se"] == pytest.approx(expected["kappa_counting_se"], rel=0.03)
    # the jackknife over 10 pairs: chi with 9 degrees of freedom, 95 % between 0.548 and 1.454
    assert 0.548 < found["kappa_se"] / expected["kappa_se"] < 1.454
    assert abs(found["kappa"] - found["truth_kappa"]) < 4 * found["kappa_se"]
    quoted = json.loads((night / "record.json").read_text())["bench_records"]
    assert {"dark", "pilot", "register", "backlash", "dry-lap"} <= set(quoted)


def test_the_counting_bar_is_the_scatter_of_counts_drawn_anew(night: Path) -> None:
    """Every sum of an opening at a position is drawn 20 000 times from the law of its counts.

    Their scatter is known to 0.5 %; weights and signs are those of the archive, the sum is written out here.
    """
    found = reported(night)
    visits = open_visits(night)
    at_mm, opening = visits["position_mm"].values, visits["opening"].values
    weights, places_mm = np.array(visits.attrs["weights"]), visits.attrs["positions_mm"]
    random, sums = np.random.default_rng(8), {}
    for mask in range(8):
        rows = [(opening == mask) & np.isclose(at_mm, place) for place in places_mm]
        counts = np.array([visits["values"].values[row, 0].sum() for row in rows])
        live_s = np.array([visits["live_s"].values[row].sum() for row in rows])
        sums[mask] = random.poisson(counts, (20_000, len(rows))) / live_s

    def pair(one: int, other: int) -> np.ndarray:
        return np.asarray(sums[one | other] - sums[one] - sums[other] + sums[0])

    a, b, c = 1, 2, 4
    pairs = {"AB": pair(a, b), "AC": pair(a, c), "BC": pair(b, c)}
    third = sums[7] - sums[3] - sums[5] - sums[6] + sums[1] + sums[2] + sums[4] - sums[0]
    delta = sum(np.array(visits.attrs["signs"][name]) * one for name, one in pairs.items())
    kappa = (third @ weights) / (delta @ weights)

    assert found["kappa_counting_se"] == pytest.approx(kappa.std(), rel=0.03)


def test_the_report_of_the_night_says_what_the_run_found(night: Path) -> None:
    found = reported(night)
    results = open_visits(night).attrs["results"]
    page = (night / "report.html").read_text()

    assert (night / "report.pdf").read_bytes()[:5] == b"%PDF-"
    assert found["kappa_se"] == pytest.approx(results["kappa_se"])
    assert f"({1e4 * found['kappa']:+.2f} ± {1e4 * found['kappa_se']:.2f}) × 1e-4" in page
    assert all(record in page for record in ("dark/", "dry-lap/"))
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


def test_a_run_on_the_real_clock_takes_the_places_of_the_bench_and_its_report_says_so(
    measurement: Path, instruments: object, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    lab, plan = str(tmp_path / "lab"), str(measurement.with_name("tonight.toml"))
    measurement.write_text(measurement.read_text().replace("\ngoal_se", "\n# goal_se"))  # seconds reach none
    assert main(["task", "register", str(measurement), "--into", lab]) == 0
    assert main(["compose", str(measurement), "--bench", lab, "--write", plan]) == 0
    capsys.readouterr()

    status, run = told(capsys, "run", plan, "--into", lab)

    page = (Path(run["run"]) / "report.html").read_text()
    assert (status, run["kind"], run["visits_missing"]) == (0, "run", 0)
    assert "The openings stand where register/" in page
    assert "Bench records that held at the start" in page
