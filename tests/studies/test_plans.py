"""The studies of plans, each on a few draws; the whole ones run on request."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from daq.estimate.arrays import FloatArray
from tests.studies import plan_drift, plan_nights, plan_orders, plan_ripple, plan_search
from tests.studies.plan_bench import Machine, ideal, pattern
from tests.studies.plans import STUDIES, main


@pytest.mark.parametrize("order", ["zig-zag", "cyclic", "mirror in Thue-Morse order"])
def test_an_order_costs_what_is_known_of_it(order: str) -> None:
    row = plan_orders.row(order, 1)

    assert all(row["meets"].values()), row


@pytest.mark.parametrize(("bench", "known"), plan_search.KNOWN.items(), ids=str)
def test_the_best_of_all_orders_takes_the_time_that_is_known_of_it(
    bench: tuple[float, float, float], known: tuple[float, ...]
) -> None:
    settle_s, slot_s, drift = bench
    of, machine = pattern(), Machine(settle_s, slot_s)

    q = min(
        plan_search._searched(of, machine, drift, float(tau), 0.0, 1) for tau in plan_search.TAUS_S[::3]
    ) / ideal(of)

    assert q == pytest.approx(known[plan_search.NAMES.index("searched")], rel=0.03)


def test_planned_drift_is_what_a_few_paths_show() -> None:
    row = plan_drift.row("zigzag", "relaxing", 400)

    assert abs(row["ratio"] - 1) < 4 * row["ratio_se"]


def test_a_ripple_at_the_stand_is_fatal_without_measures_and_harmless_with_them() -> None:
    row = plan_ripple.row("stand", 40)

    assert row["without"] > 0.9
    assert row["with"] < 0.05 + 4 * np.sqrt(0.05 * 0.95 / 40)


def test_a_plan_without_coins_is_the_same_pair_over_and_over() -> None:
    heads = plan_ripple._heads(plan_ripple._measurement())

    openings = heads.plan.opening.reshape(plan_ripple.PAIRS, -1)
    steps_s: FloatArray = np.diff(heads.start_s.reshape(plan_ripple.PAIRS, -1), axis=1)
    assert (openings == openings[0]).all()
    assert steps_s == pytest.approx(np.broadcast_to(steps_s[0], steps_s.shape))


@pytest.mark.parametrize("source", ["linear", "random walk"])
def test_a_few_nights_come_out_as_foretold(source: str) -> None:
    row = plan_nights.row(source, 6)

    assert abs(row["ratio"] - 1) < 4 * row["ratio_se"] + 0.05


def test_the_command_writes_a_result(tmp_path: Path) -> None:
    status = main(["plan_drift", "--nights", "3", "--into", str(tmp_path)])

    result = json.loads((tmp_path / "plan_drift.json").read_text())
    missed = [row for row in result["rows"].values() if not row["meets"]["ratio"]]
    assert status == bool(missed)
    assert result["study"] == "plan_drift"


def test_every_result_in_the_tree_is_of_the_study_that_it_is_named_after() -> None:
    from tests.studies.__main__ import RESULTS

    kept = [RESULTS / f"{name}.json" for name in STUDIES if (RESULTS / f"{name}.json").exists()]

    assert kept
    assert [json.loads(path.read_text())["study"] for path in kept] == [path.stem for path in kept]
