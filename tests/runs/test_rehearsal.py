"""Whole runs through the command line's own functions, on simulated hardware in virtual time."""

from __future__ import annotations

import json
import random
import signal
import subprocess
import sys
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
import zarr

from daq import estimate_run, open_visits
from daq.cli import main
from daq.openings import names
from tests.examples import CONFIGS
from tests.runs.watching import begun, wait_for_rows

MEASURE = {"--hours": "1.1", "--seed": "7"}


def short_rehearsal(lab: Path, capsys: pytest.CaptureFixture[str], *more: str) -> dict[str, Any]:
    words = [word for pair in MEASURE.items() for word in pair]
    status = main(["rehearse", *words, "--into", str(lab), "--json", *more])
    figures: dict[str, Any] = json.loads(capsys.readouterr().out.splitlines()[-1])
    return figures | {"status": status}


@pytest.fixture(scope="module")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return the folder of a finished short rehearsal."""
    lab = tmp_path_factory.mktemp("lab")
    assert main(["rehearse", "--hours", "1.1", "--seed", "7", "--link", "direct", "--into", str(lab)]) == 0
    (folder,) = (lab / "runs").iterdir()
    return folder


def test_the_same_seed_gives_the_same_counts_over_tcp_and_in_process(tmp_path, capsys):
    runs = [short_rehearsal(tmp_path, capsys, "--link", link) for link in ("tcp", "direct", "tcp")]

    assert {run["digest"] for run in runs} == {runs[0]["digest"]}
    assert {run["gate_digest"] for run in runs} == {runs[0]["gate_digest"]}
    assert all(run["status"] == 0 and run["visits"] == 1312 for run in runs)


def test_another_seed_gives_other_counts(tmp_path, capsys):
    first = short_rehearsal(tmp_path, capsys, "--link", "direct")
    other = short_rehearsal(tmp_path, capsys, "--link", "direct", "--seed", "8")

    assert first["digest"] != other["digest"]


def test_the_json_holds_what_is_promised(tmp_path, capsys):
    figures = short_rehearsal(tmp_path, capsys, "--link", "direct")

    promised = (
        "run visits pairs kappa kappa_se kappa_counting_se interval_95 whole_night_95 excess truth_kappa"
    )
    assert set(promised.split()) <= set(figures)
    assert {"digest", "speed_up", "live_fraction"} <= set(figures)
    assert abs(figures["truth_kappa"]) < 1e-12


def test_gates_open_when_the_itinerary_says(finished):
    visits = open_visits(finished)
    planned = xr.open_zarr(finished / "run.zarr", group="itinerary", consolidated=False)

    gates_s = (visits["gate_open_ns"].values - visits["gate_open_ns"].values[0]) / 1e9

    assert np.abs(gates_s - planned["start_s"].values).max() < 0.011  # one poll of an axis


def test_a_finished_run_opens_with_zarr_and_xarray_alone(finished):
    group: Any = zarr.open_group(finished / "run.zarr", mode="r")
    dataset = xr.open_zarr(finished / "run.zarr")

    assert group["values"].shape == (1312, 1)
    for name, variable in dataset.variables.items():
        assert variable.attrs.get("units"), name
        assert variable.attrs.get("long_name"), name
    assert not (finished / "journal.sqlite").exists()


def kappa_by_hand(folder: Path) -> float:
    """Return kappa from the plain Zarr group with numpy alone."""
    group: Any = zarr.open_group(folder / "run.zarr", mode="r")
    column = {name: group[name][:] for name in ("visit", "attempt", "opening", "position_mm", "live_s")}
    counts = group["values"][:, 0]
    stand = group["itinerary/stand"][:][column["visit"]]
    whole = np.zeros(counts.size, bool)
    for one in np.unique(stand):
        mine = np.flatnonzero(stand == one)
        for attempt in sorted(set(column["attempt"][mine]), reverse=True):
            rows = mine[column["attempt"][mine] == attempt]
            if len(rows) == 8:
                whole[rows] = True
                break
    attributes = dict(group.attrs)
    tau = attributes["dead_time_s"]
    seen = counts / column["live_s"]
    true = seen / (1 - seen * tau) * column["live_s"]
    rates = {}
    for mask, name in enumerate(names(3)):
        rates[name] = np.array(
            [
                true[rows].sum() / column["live_s"][rows].sum()
                for place in attributes["positions_mm"]
                for rows in [whole & (column["opening"] == mask) & (column["position_mm"] == place)]
            ]
        )
    a, b, c, none = (rates[name] for name in ("A", "B", "C", "none"))
    epsilon = rates["ABC"] - rates["AB"] - rates["AC"] - rates["BC"] + a + b + c - none
    pairs = {"AB": (a, b), "AC": (a, c), "BC": (b, c)}
    delta: Any = sum(
        np.array(attributes["signs"][name]) * (rates[name] - first - second + none)
        for name, (first, second) in pairs.items()
    )
    weights = np.array(attributes["weights"])
    return float((weights @ epsilon) / (weights @ delta))


def test_kappa_from_plain_zarr_equals_the_tools(finished):
    assert kappa_by_hand(finished) == pytest.approx(
        estimate_run(open_visits(finished)).kappa, rel=0, abs=1e-12
    )


def test_the_report_of_the_archive_is_what_the_run_said(finished, capsys):
    status = main(["report", str(finished), "--json"])

    figures = json.loads(capsys.readouterr().out)
    assert status == 0
    assert figures["kappa"] == estimate_run(open_visits(finished)).kappa
    assert figures["visits_missing"] == figures["visits_repeated"] == 0


@pytest.mark.parametrize("kill", range(3))
def test_a_killed_rehearsal_is_gone_on_with_and_loses_nothing(tmp_path, kill):
    words = [sys.executable, "-m", "daq", "rehearse", "--hours", "1.1", "--seed", str(kill)]
    process = subprocess.Popen([*words, "--link", "direct", "--into", tmp_path], stderr=subprocess.DEVNULL)
    folder = begun(tmp_path, process)
    wait_for_rows(folder, random.Random(kill).randrange(1, 700))
    process.send_signal(signal.SIGKILL)
    process.wait()
    before = open_visits(folder).load()
    assert before.sizes["row"] >= 1

    resumed = subprocess.run(
        [sys.executable, "-m", "daq", "rehearse", "--resume", folder, "--link", "direct", "--json"],
        capture_output=True,
        check=False,
    )

    after = open_visits(folder).load()
    assert resumed.returncode == 0, resumed.stderr
    kept = after.isel(row=slice(0, before.sizes["row"]))
    for name in ("visit", "attempt", "values", "gate_open_ns", "gate_close_ns", "opening"):
        assert (kept[name].values == before[name].values).all(), name
    opened = after["gate_open_ns"].values
    assert (np.diff(opened) > 0).all()
    assert (opened[1:] >= after["gate_close_ns"].values[:-1]).all()
    assert set(after["visit"].values) == set(range(1312))
    again = after["visit"].values[after["attempt"].values == 2]
    assert again.size in (0, 8)
    assert estimate_run(after).pairs == 2
    assert kappa_by_hand(folder) == pytest.approx(estimate_run(after).kappa, rel=0, abs=1e-12)


def test_a_drift_of_five_percent_leaves_zigzag_alone_and_ruins_blocked_order(tmp_path, capsys):
    figures = {}
    for order in ("zigzag", "blocked"):
        words = ["rehearse", str(CONFIGS / "lantern-five-percent.toml"), "--link", "direct", "--order", order]
        main([*words, "--hours", "2.1", "--into", str(tmp_path), "--json"])
        figures[order] = json.loads(capsys.readouterr().out.splitlines()[-1])

    off = {order: one["kappa"] - one["truth_kappa"] for order, one in figures.items()}
    assert abs(off["zigzag"]) <= 3 * figures["zigzag"]["kappa_se"]
    assert abs(off["blocked"]) > 3 * figures["blocked"]["kappa_counting_se"]
