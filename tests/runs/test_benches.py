"""The four example benches: each rehearses over TCP, and its residual agrees with its truth."""

from __future__ import annotations

import json
import tomllib
from pathlib import Path
from typing import Any

import pytest

from daq.cli import main
from daq.estimate import jet_speed_m_s, wavelength_m
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


@pytest.mark.parametrize(
    ("name", "mass_u", "speed_m_s"),
    [("beam", 20.18, jet_speed_m_s(20.18, 293.0)), ("vapour", 1300.0, 200.0)],  # neon, 293 K; an oven
)
def test_the_waves_of_a_bench_are_those_of_its_particles(name: str, mass_u: float, speed_m_s: float) -> None:
    geometry = tomllib.loads((CONFIGS / "rigs" / f"{name}.toml").read_text())["geometry"]

    assert geometry["wavelength_m"] == pytest.approx(wavelength_m(mass_u, speed_m_s), rel=5e-3)


def test_the_slits_of_the_beam_bench_are_cut_apart_to_two_nanometres() -> None:
    table = tomllib.loads((CONFIGS / "rigs" / "beam.toml").read_text())
    off_nm = [
        1e9 * (cut[key] - table["slits"][letter][key])
        for shown in table["mask"]["openings"].values()
        for letter, cut in shown.get("cuts", {}).items()
        for key in ("centre_m", "width_m")
    ]

    assert len(off_nm) == 24
    assert sum(one**2 for one in off_nm) ** 0.5 == pytest.approx(2 * 24**0.5, rel=4 / 48**0.5)
