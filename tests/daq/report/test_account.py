from __future__ import annotations

from pathlib import Path

import numpy as np

from daq.estimate import estimate_run
from daq.estimate.account import account_of
from daq.report.account import account_lines
from daq.report.text import _residual
from tests.daq.estimate.nights import dataset, plan, rates_hz, readings

PLAN = plan(positions=4, laps=20, dead_time_s=0.0)


def figures(rows):
    archive = dataset(PLAN, rows)
    archive.attrs["expected_hz"] = rates_hz(PLAN.positions_mm).tolist()
    archive.attrs["slit_loads"] = {}
    return estimate_run(archive).to_json() | {"account": account_of(archive).to_json(), "noticed": []}


def test_the_account_says_estimator_budget_and_checks():
    text = "\n".join(account_lines(figures(readings(PLAN, np.random.default_rng(1)))))

    assert "estimator: plain contrast, because the stands are mirrored and 0.0 % of them are left out" in text
    assert "Where the error of kappa comes from (in units of 1e-4)" in text
    assert text.count("To halve it: ") == 7
    assert "not known  detector position (systematic)" in text
    assert "odd less even pairs" in text and "expected" in text


def test_a_check_that_is_off_is_pointed_at():
    lap = np.arange(len(PLAN.stand)) // (8 * 4)
    leak = np.where((lap % 2 == 0) & (PLAN.opening == 7), 1.02, 1.0)

    lines = account_lines(figures(readings(PLAN, np.random.default_rng(2), leak)))

    (off,) = [line for line in lines if line.startswith("first less second laps")]
    assert off.endswith("<-- look at this")


def test_what_the_laps_showed_is_told():
    found = figures(readings(PLAN, np.random.default_rng(4))) | {"noticed": ["Lap 9 does not fit."]}

    assert account_lines(found)[-1] == "Lap 9 does not fit."


def test_below_two_pairs_there_is_no_account():
    assert account_lines(figures(readings(PLAN, np.random.default_rng(3))[:64])) == []


def test_an_opening_that_was_never_measured_is_named():
    empty = {"kappa_se": None, "pairs": 0, "openings_missing": ["AB", "ABC"]}

    text = "\n".join(_residual(empty))

    assert "Never measured: AB, ABC. The residual needs every opening." in text


def test_no_sentence_says_more_than_was_measured():
    source = Path(account_lines.__code__.co_filename).read_text().lower()

    assert not any(word in source for word in ("violat", "confirm", "born"))
