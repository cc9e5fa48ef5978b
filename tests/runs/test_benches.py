"""The four example benches: each rehearses over TCP, and its residual agrees with its truth."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest

from daq.cli import main
from tests.examples import CONFIGS

# Name of the measurement, and hours of it that are enough to see what it shows.
BENCHES = {"lantern": "0.6", "beam": "2", "vapour": "2", "horn": "0.5", "horn-absorber": "0.5"}


def rehearsed(name: str, lab: Path, capsys: pytest.CaptureFixture[str]) -> dict[str, Any]:
    words = ["--hours", BENCHES[name], "--link", "tcp", "--into", str(lab), "--json"]
    assert main(["rehearse", str(CONFIGS / f"{name}.toml"), *words]) == 0
    figures: dict[str, Any] = json.loads(capsys.readouterr().out.splitlines()[-1])
    return figures


def off_truth(figures: dict[str, Any]) -> float:
    """Return how far a residual is off its truth, in counting bars: few pairs have a rough jackknife."""
    return float(abs(figures["kappa"] - figures["truth_kappa"]) / figures["kappa_counting_se"])


@pytest.mark.parametrize("name", ["lantern", "vapour"])
def test_a_bench_gives_the_residual_of_its_truth(
    name: str, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    figures = rehearsed(name, tmp_path, capsys)

    assert off_truth(figures) < 4
    assert figures["visits"] >= 304 and figures["stands_left_out"] <= 1


def test_the_beam_bench_shows_the_geometry_of_its_slits_and_nothing_else(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    figures = rehearsed("beam", tmp_path, capsys)

    found = figures["geometry"]
    assert off_truth(figures) < 4
    assert abs(figures["kappa"]) > 1e-2  # slits of 80 nm cut to 2 nm
    assert abs(found["kappa"]) < 4 * (found["counting_se"] ** 2 + found["geometry_se"] ** 2) ** 0.5 < 2e-3
    assert found["geometry_se"] < 3e-4 and not found["differ"]
    assert abs(found["joint_kappa"]) < 4 * found["joint_se"]
    first = found["spectrum"]["lines"][0]
    assert first["before"] > 100 and first["after"] < 10


def test_an_absorber_takes_the_looped_paths_of_the_horn_bench_away(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    without = rehearsed("horn", tmp_path, capsys)
    with_absorber = rehearsed("horn-absorber", tmp_path, capsys)

    assert max(off_truth(without), off_truth(with_absorber)) < 4
    assert 0.02 < without["kappa"] < 0.06  # several per cent
    assert abs(with_absorber["kappa"]) < 4 * with_absorber["kappa_counting_se"] < 0.005
