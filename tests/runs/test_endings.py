"""How runs end besides their plan, and what their archive says of it."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from daq.cli import main
from daq.cli.toml import toml_text
from daq.estimate import estimate_run
from daq.service import start
from daq.service.asked import Asked
from daq.service.equip import Wanted
from daq.service.load import load
from daq.service.requests import Request
from daq.storage.log import read_log
from daq.storage.reader import open_visits, read_meta
from tests.examples import CONFIGS, changed, measurement_table

SMALL = {"positions__number": 3, "itinerary__laps": 30, "itinerary__dwell_s": 0.5, "estimate__goal_se": 2e-3}


def description(folder: Path, **more: Any) -> Path:
    table = changed(measurement_table(), rig=str(CONFIGS / "rigs" / "lantern.toml"), **(SMALL | more))
    path = folder / "small.toml"
    path.write_text(toml_text(table))
    return path


def test_a_run_whose_goal_is_met_ends_at_the_end_of_a_pair_in_good_order(tmp_path, capsys):
    file = description(tmp_path, stop={"goal": True})

    status = main(["rehearse", str(file), "--link", "direct", "--into", str(tmp_path / "lab")])

    (run,) = (tmp_path / "lab" / "runs").iterdir()
    found = read_meta(run)["stop"]
    pairs = open_visits(run)["pair"].values
    assert status == 0
    assert (found["kind"], found["band"], found["who"]) == ("goal", "once", "the plan")
    assert 12 <= found["pairs"] < 15
    assert found["pairs"] == pairs.max() + 1
    assert "the goal of the error bar is met, after" in capsys.readouterr().out


@pytest.mark.parametrize(("blinding", "band"), [(None, "whole night"), ("0.1", "once")])
def test_an_end_by_hand_says_who_and_whether_kappa_could_be_seen(tmp_path, blinding, band):
    more = {"blinding": {"halfwidth": blinding}} if blinding else {}
    loaded = load(description(tmp_path, **more))
    asked, taken = Asked(), []

    def took(reading: Any) -> None:
        taken.append(reading)
        if len(taken) == 400:
            asked.requests = lambda: [Request(1, "end", "Kim", "2026-12-01T00:00:00Z")]

    folder, ended = start.begin(loaded, tmp_path / "lab", Wanted("direct", asked=asked, on_visit=took))

    found = read_meta(folder)["stop"]
    assert ended == "ended at request after a stand"
    assert (found["kind"], found["who"], found["band"]) == ("by hand", "Kim", band)
    assert found["kappa_visible"] == (blinding is None)
    assert found["pairs"] == 8  # 400 visits of 24 a lap
    assert bool(found["remark"]) == (blinding is None)
    last = [entry for entry in read_log(folder) if entry["event"] == "ended"][-1]
    assert (last["who"], last["kind"], last["pairs"]) == ("Kim", "by hand", 8)


def test_a_declared_hard_end_makes_the_whole_night_band_narrower(tmp_path, capsys):
    ends = []
    for number, more in enumerate(({}, {"stop": {"hard_end": True}})):
        lab = tmp_path / str(number)
        main(["rehearse", str(description(tmp_path, **more)), "--link", "direct", "--into", str(lab)])
        (run,) = (lab / "runs").iterdir()
        ends.append(estimate_run(open_visits(run)))

    plain, hard = (found.whole_night_95 for found in ends)
    assert ends[0].kappa == ends[1].kappa
    assert plain is not None and hard is not None
    # 15 pairs of 15: multipliers 3.55 of a plan of 15, and 2.51 of a hard end.
    assert 0.6 < (hard[1] - hard[0]) / (plain[1] - plain[0]) < 0.8
