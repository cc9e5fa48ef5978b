from __future__ import annotations

from dataclasses import replace
from math import isclose, sqrt
from random import Random
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.estimate import Plan, Running, estimate_run
from daq.estimate.account import account_of
from daq.estimate.budget import known_of
from daq.records import Quality, Reading
from tests.daq.estimate.nights import again, dataset, plan, reading, readings

PLAN = plan(positions=3, laps=6)
NIGHT = readings(PLAN, np.random.default_rng(1))


def run(of: Plan, rows: list[Reading]) -> Running:
    """Return a running estimate that has taken readings in."""
    running = Running(of)
    for row in rows:
        running.add(row)
    return running


def agree(one: Any, other: Any) -> bool:
    """Return whether two JSON values are the same to 1e-12 relative, None where None is."""
    if isinstance(one, dict):
        return one.keys() == other.keys() and all(agree(one[key], other[key]) for key in one)
    if isinstance(one, list):
        return len(one) == len(other) and all(map(agree, one, other))
    if isinstance(one, float) and isinstance(other, float):
        return isclose(one, other, rel_tol=1e-12, abs_tol=0.0)
    return bool(one == other)


STANDS = [NIGHT[start : start + 8] for start in range(0, len(NIGHT), 8)]
TROUBLE = st.lists(
    st.tuples(
        st.integers(0, len(STANDS) - 1),
        st.sampled_from([Quality.GOOD, Quality.MOVED]),  # the try before
        st.integers(1, 8),  # how many visits of it were made
        st.sampled_from([Quality.GOOD, Quality.OVERFLOW]),  # the try after
    ),
    max_size=4,
    unique_by=lambda repeat: repeat[0],
)


def troubled(repeats: list[tuple[int, Quality, int, Quality]], stop: int) -> list[Reading]:
    """Return a night of which some stands were tried twice, broken off after so many stands."""
    rows: list[Reading] = []
    trouble = {stand: (before, made, after) for stand, before, made, after in repeats}
    for number, stand in enumerate(STANDS[:stop]):
        if number not in trouble:
            rows += stand
            continue
        before, made, after = trouble[number]
        rows += [again(row, 1, row.values[0] + 1000, before) for row in stand[:made]]
        rows += [again(row, 2, row.values[0], after) for row in stand]
    return rows


@settings(max_examples=60)
@given(TROUBLE, st.integers(0, len(STANDS)), st.integers(0, 7), st.randoms(use_true_random=False))
def test_the_running_estimate_is_the_offline_one_whatever_the_order_of_calls(
    repeats: list[tuple[int, Quality, int, Quality]], stop: int, more: int, shuffler: Random
) -> None:
    rows = troubled(repeats, stop)
    rows += STANDS[stop][:more] if stop < len(STANDS) else []
    called = list(rows)
    shuffler.shuffle(called)

    running = run(PLAN, called).estimate().to_json()

    assert agree(running, estimate_run(dataset(PLAN, rows)).to_json())


def test_asking_in_between_changes_nothing() -> None:
    running = Running(PLAN)
    for row in NIGHT:
        running.add(row)
        running.estimate()
        running.history()

    assert agree(running.estimate().to_json(), run(PLAN, NIGHT).estimate().to_json())
    assert running.history() == run(PLAN, NIGHT).history()


def test_a_repeated_stand_is_ruled_by_its_latest_good_try() -> None:
    shifted = [again(row, 2, row.values[0] + 50) for row in STANDS[0]]
    bad = [again(row, 3, row.values[0] + 9e3, Quality.MOVED) for row in STANDS[0]]

    found = run(PLAN, [*NIGHT, *shifted, *bad]).estimate()

    assert agree(found.to_json(), run(PLAN, [*shifted, *NIGHT[8:]]).estimate().to_json())


def test_a_stand_that_no_try_made_good_is_left_out_but_holds_no_pair_up() -> None:
    bad = [replace(row, quality=Quality.OFF_TARGET) for row in STANDS[4]]

    found = run(PLAN, [*NIGHT[:32], *bad, *NIGHT[40:]]).estimate()

    assert (found.pairs, found.stands_used, found.stands_left_out, found.visits) == (3, 17, 1, 136)


@pytest.mark.parametrize(
    "broken",
    [{"values": (1e9,)}, {"live_s": 0.0}, {"live_s": float("nan")}, {"values": (-1.0,)}],
    ids=["above saturation", "no live time", "live time lost", "below zero"],
)
def test_a_value_that_cannot_be_corrected_leaves_its_stand_out(broken: dict[str, Any]) -> None:
    rows = [*NIGHT[:3], replace(NIGHT[3], **broken), *NIGHT[4:]]

    found = run(PLAN, rows).estimate()

    assert found.stands_left_out == 1
    assert agree(found.to_json(), estimate_run(dataset(PLAN, rows)).to_json())


def test_unplanned_visits_are_passed_over() -> None:
    dark = replace(NIGHT[0], visit=-1, values=(110,), quality=Quality.DARK)

    found = run(PLAN, [dark, *NIGHT[:60], dark, *NIGHT[60:]]).estimate()

    assert agree(found.to_json(), run(PLAN, NIGHT).estimate().to_json())


def test_power_readings_bring_their_own_variance() -> None:
    watts = plan(laps=4, dead_time_s=0.0)
    rows = [
        replace(row, values=(row.values[0] - 1760,), values_var=(1e6,))  # less the background
        for row in readings(watts, np.random.default_rng(3))
    ]

    found = run(watts, rows).estimate()

    # Four laps of 2.2 s with a standard deviation of 1000 each.
    assert found.rates_se_hz == pytest.approx(np.full((3, 8), sqrt(4) * 1000 / (4 * 2.2)))
    assert agree(found.to_json(), estimate_run(dataset(watts, rows)).to_json())


def test_history_has_one_entry_for_each_complete_pair() -> None:
    running = run(PLAN, NIGHT[:-1])

    history = running.history()

    assert [len(column) for column in history.values()] == [2] * 6
    # 48 visits a pair, 3 s apart, the last gate 2.2 s long.
    assert history["hours"] == pytest.approx([(47 * 3 + 2.2) / 3600, (95 * 3 + 2.2) / 3600])
    assert history["interval_low"][0] is None
    assert history["kappa"][-1] == pytest.approx(running.estimate().kappa, rel=1e-12)


def test_history_is_rewritten_when_an_earlier_pair_changes() -> None:
    late = run(PLAN, NIGHT)
    late.history()
    repeated = [again(row, 2, row.values[0] + 500) for row in STANDS[1]]

    for row in repeated:
        late.add(row)

    assert late.history() == run(PLAN, [*NIGHT, *repeated]).history()
    assert late.history()["kappa"] != run(PLAN, NIGHT).history()["kappa"]


def test_history_follows_the_order_of_the_pairs_not_of_the_calls() -> None:
    running = run(PLAN, NIGHT[48:])
    running.history()

    for row in NIGHT[:48]:
        running.add(row)

    assert running.history() == run(PLAN, NIGHT).history()


def test_a_long_history_is_thinned_and_keeps_its_end() -> None:
    long = plan(positions=1, laps=1604)
    running = run(long, readings(long, np.random.default_rng(2)))

    history = running.history()

    assert len(history["kappa"]) == 58  # every fourteenth of 802 pairs, and the last
    assert history["kappa"][-1] == pytest.approx(running.estimate().kappa, rel=1e-12)


def test_before_the_first_stand_nothing_is_known() -> None:
    found = Running(PLAN).estimate()

    assert (found.kappa, found.kappa_se, found.pairs, found.printable) == (None, None, 0, False)
    assert Running(PLAN).history()["kappa"] == []
    assert found.to_json()["epsilon_hz"] == [None] * 3


def test_the_pattern_fills_before_the_first_pair_is_complete() -> None:
    found = run(PLAN, NIGHT[:16]).estimate()

    assert np.isfinite(found.rates_hz).all(axis=1).tolist() == [True, True, False]
    assert found.kappa is None


def test_visits_of_another_itinerary_are_an_error() -> None:
    with pytest.raises(IndexError):
        Running(PLAN).add(reading(plan(positions=3, laps=8), len(NIGHT), 1.0))


def test_the_budget_while_the_run_goes_on_is_that_of_the_archive_but_for_the_encoders() -> None:
    running = run(PLAN, NIGHT)
    archive = dataset(PLAN, NIGHT)
    archive.attrs |= {"dead_time_u_s": 5e-9, "slit_loads": {"A": 3e-6}}

    found, whole = running.budget(known_of(archive.attrs)), account_of(archive).budget

    assert found is not None
    assert whole is not None
    told = {line.name: line.value for line in found.lines}
    assert agree(told, {line.name: line.value for line in whole.lines})
    assert told["dead time"] > 0  # type: ignore[operator]
    assert told["detector position"] is None
    assert running.budget(known_of(archive.attrs)) is found


def test_before_the_second_pair_there_is_no_running_budget() -> None:
    assert run(PLAN, NIGHT[: len(NIGHT) // 3]).budget(known_of({})) is None
