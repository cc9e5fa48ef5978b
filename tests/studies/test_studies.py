"""The studies themselves, each on a few nights; the whole ones run on request."""

from __future__ import annotations

import json
from collections.abc import Callable
from math import sqrt
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from tests.studies import (
    benches,
    chaos,
    charts,
    exclusions,
    irregular,
    masks,
    matrix,
    plans,
    quality,
    tasks,
    zigzag,
)
from tests.studies.__main__ import RESULTS, STUDIES, main, misses
from tests.studies.bench import generator_of, night
from tests.studies.sources import SOURCES
from tests.studies.tables import BEGIN, DEVELOPERS, END, between, text


def test_a_few_zig_zag_nights() -> None:
    found = zigzag.study(40)["rows"]

    assert set(SOURCES) <= set(found)
    for source, row in found.items():
        # Of 40 nights (5 of Lantern): four simulation errors of each figure.
        assert abs(row["bias"]) < 4 * row["bias_se"], source
        assert row["coverage_95"] > 0.95 - 4 * row["coverage_95_se"], source
        if source != "flicker":
            assert row["sd_over_bound"] < 1.03 + 4 * row["sd_over_bound_se"], source
    assert found["flicker"]["sd"] > 1.5 > found["flicker"]["monitored"]["sd"]


def test_a_few_irregular_nights() -> None:
    row = irregular.row("linear", 12)

    assert abs(row["bias"]) < 4 * row["bias_se"]
    assert row["sd"] < 1.12 + 4 * row["sd_se"]
    assert row["coverage_95"] > 0.95 - 4 * row["coverage_95_se"]


def test_a_few_nights_of_other_benches() -> None:
    for name, row in benches.study(30)["rows"].items():
        assert abs(row["bias"]) < 4 * row["bias_se"], name
        assert row["coverage_95"] > 0.95 - 4 * row["coverage_95_se"], name


def test_lost_visits_cost_nothing_as_whole_stands_and_much_alone() -> None:
    found = exclusions.study(4)["rows"]

    assert all(row["meets"]["error"] for row in found.values())
    assert found["lone visits dropped"]["rms"] > 20 * found["whole stands dropped"]["rms"]


def test_a_spoilt_night_of_quality() -> None:
    of = night()

    half = quality._spoilt(of, "half of the counts", 0.5, 1)

    assert (half["found"], half["wrongly_named"]) == (1.0, 0.0)


def test_a_study_has_its_own_numbers_for_every_source_and_always_the_same() -> None:
    draws = {name: generator_of("zigzag", name).random() for name in SOURCES}

    assert len(set(draws.values())) == len(SOURCES)
    assert generator_of("zigzag", "linear").random() == draws["linear"]


@pytest.mark.parametrize("source", SOURCES)
def test_a_source_has_the_size_that_its_name_says(source: str) -> None:
    time_s = np.linspace(0, 36_000, 1201)

    strength = SOURCES[source](time_s, 400, np.random.default_rng(1))

    change = np.log(strength[:, -1] / strength[:, 0])
    falls = {
        "none": 0.0,
        "linear": np.log(0.7),
        "quadratic": np.log(0.7),
        "exponential": np.log(0.8),
        "mix": np.log(0.7),
    }
    spreads = {"random walk": 0.03 * sqrt(10), "steps": 0.02 * sqrt(10), "flicker": 0.005 * sqrt(2 * 9.3)}
    assert change.mean() == pytest.approx(falls.get(source, 0.0), abs=4 * change.std() / 20 + 1e-4)
    if source in spreads:
        # 400 draws know a standard deviation to 3.5 %: four of them, and a little for slow relaxations.
        assert change.std() == pytest.approx(spreads[source], rel=0.18)
    if source.startswith("sine"):
        assert strength.max() == pytest.approx(1.02, abs=1e-4)


def test_the_command_writes_json_and_says_what_it_missed(
    tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    status = main(["exclusions", "--nights", "4", "--json", str(tmp_path / "deep" / "one.json")])

    result = json.loads((tmp_path / "deep" / "one.json").read_text())
    assert status == 0
    assert capsys.readouterr().err.splitlines()[-1] == "every figure meets its target"
    assert {"study", "rows", "about", "cpu_s"} <= set(result)


def test_a_missed_target_is_named() -> None:
    result: dict[str, Any] = {"rows": {"linear": {"meets": {"bias": True, "sd": False}}, "none": {}}}

    assert misses(result) == [("linear", "sd")]


def test_the_tables_in_print_are_those_of_the_results() -> None:
    page = DEVELOPERS.read_text()

    known = {path.stem for path in RESULTS.glob("*.json")}
    assert known == {*STUDIES, *plans.STUDIES}
    assert between(page, text(RESULTS)) == page


def test_only_what_stands_between_the_markers_is_written() -> None:
    page = f"# Mine\n\n{BEGIN}\nold\n{END}\n\ntail\n"

    assert between(page, "new\n") == f"# Mine\n\n{BEGIN}\nnew\n{END}\n\ntail\n"
    assert between("# Mine\n", "new\n") == f"# Mine\n\n{BEGIN}\nnew\n{END}\n"


@pytest.mark.parametrize("test", sorted({test for _, _, test in matrix.FAULTS.values()}))
def test_every_fault_of_the_matrix_has_its_test(test: str) -> None:
    path, name = test.split("::")

    assert f"def {name}(" in (DEVELOPERS.parent / path).read_text()


@pytest.mark.parametrize("test", sorted({test for _, test in matrix.OTHERS.values()}))
def test_everything_else_that_may_happen_has_its_test(test: str) -> None:
    path, name = test.split("::")

    assert f"def {name}(" in (DEVELOPERS.parent / path).read_text()


@pytest.fixture(scope="module")
def quiet_s() -> float:
    """Return how long the run of the matrix takes without a fault [s]."""
    return matrix._run(None)[0]


@pytest.mark.parametrize(
    ("kind", "found"),
    [
        (_HIGH := "pressure too high for 300 s", lambda: matrix._run(matrix.FAULTS[_HIGH][0])),
        (_DEAD := "service killed", matrix.MEASURED[_DEAD]),
    ],
)
def test_a_fault_costs_what_the_matrix_says(
    kind: str, found: Callable[[], matrix.Found], quiet_s: float
) -> None:
    run_s, ended, repeated = found()

    told = json.loads((RESULTS / "matrix.json").read_text())["rows"][kind]
    assert run_s - quiet_s == pytest.approx(told["lost_s"], abs=1e-6)
    assert (ended, repeated) == (told["ended"], told["repeated"])


def test_every_row_of_the_matrix_has_a_time_or_says_why_not() -> None:
    rows = json.loads((RESULTS / "matrix.json").read_text())["rows"]

    assert set(rows) == {*matrix.FAULTS, *matrix.OTHERS}
    assert all("lost_s" in row or row["why"] for row in rows.values())


def test_a_night_of_chaos_that_is_killed_loses_nothing() -> None:
    found = chaos.night(0)

    assert found["killed"]
    assert found["acknowledged"] >= 1520
    assert (found["lost"], found["misfiled"]) == (0, 0)
    assert found["ended"]


def test_a_few_alarms_and_quiet_weeks() -> None:
    found = charts.study(12)["rows"]

    steady = found["false alarms, level known"]
    assert abs(steady["weeks"] - steady["theory"]) < 4 * steady["weeks_se"]
    running = found["false alarms, as it runs"]
    assert abs(running["weeks"] - running["theory"]) < 4 * running["weeks_se"]
    assert all(all(found[row]["meets"].values()) for row in ("step of 0.5 %", "ramp of 1 % an hour"))
    assert found["quiet weeks"]["wakes"] == 0


def test_a_few_draws_of_bench_tasks() -> None:
    found = tasks.study(16)["rows"]

    assert set(found) == set(json.loads((RESULTS / "tasks.json").read_text())["rows"])
    for name, row in found.items():
        assert abs(row.get("bias", 0.0)) < 4.5 * row.get("bias_se", 1.0), name
        if name.startswith("clipping"):
            assert row["meets"]["said"], name


def test_a_few_draws_of_tasks_of_the_mask() -> None:
    found = masks.study(16)["rows"]

    assert set(found) == set(json.loads((RESULTS / "masks.json").read_text())["rows"])
    for name, row in found.items():
        assert abs(row.get("bias", 0.0)) < 4.5 * row.get("bias_se", 1.0), name
        if name.startswith(("chip", "a window")):
            assert row["right"] == 1.0, name
