from __future__ import annotations

from typing import Any

import pytest

from daq.estimate.stopping import (
    BROKEN,
    BY_HAND,
    END_TIME,
    FUTILITY,
    GOAL,
    ONCE,
    PLANNED,
    WHOLE_NIGHT,
    Stopping,
    conditional_power,
    due,
    stop,
)

GOAL_RULE, FUTILE_RULE = Stopping(goal_se=1e-4), Stopping(futility=True)


def numbers(**changes: Any) -> dict[str, Any]:
    found = {"kappa": 0.0, "kappa_se": 1e-4, "kappa_counting_se": 1e-4, "pairs": 12, "planned_pairs": 20}
    return found | changes


@pytest.mark.parametrize(
    ("kind", "visible", "band"),
    [
        (PLANNED, True, ONCE),
        (GOAL, True, ONCE),
        (END_TIME, True, ONCE),
        (BY_HAND, False, ONCE),
        (BROKEN, False, ONCE),
        (BY_HAND, True, WHOLE_NIGHT),
        (BROKEN, True, WHOLE_NIGHT),
        (FUTILITY, True, WHOLE_NIGHT),
    ],
)
def test_the_bar_read_once_holds_when_the_end_did_not_look_at_kappa(
    kind: str, visible: bool, band: str
) -> None:
    found = stop(kind, "why", "somebody", 11, visible)

    assert found.band == band
    assert bool(found.remark) == (band == WHOLE_NIGHT)
    assert (found.who, found.pairs, found.kappa_visible) == ("somebody", 11, visible)


@pytest.mark.parametrize(
    ("pairs", "counting", "rule", "expected"),
    [
        (12, 1e-4, Stopping(1e-4), GOAL),
        (11, 1e-4, Stopping(1e-4), ""),  # never before pair 12
        (12, 1e-4, Stopping(1e-4, excess=1.01), ""),
        (12, 1.01e-4, Stopping(1e-4), ""),
        (12, 1e-4, Stopping(), ""),
    ],
)
def test_the_goal_is_met_by_counting_error_times_planned_excess(
    pairs: int, counting: float, rule: Stopping, expected: str
) -> None:
    assert due(rule, numbers(pairs=pairs, kappa_counting_se=counting)) == expected


def test_the_jackknife_of_the_moment_does_not_end_a_run() -> None:
    assert due(GOAL_RULE, numbers(kappa_se=1e-9, kappa_counting_se=2e-4)) == ""


def test_a_pair_that_is_all_but_complete_counts() -> None:
    just_short = numbers(pairs=12, kappa_counting_se=1.04e-4)

    assert due(GOAL_RULE, just_short) == ""
    assert due(GOAL_RULE, just_short, through=13) == GOAL


@pytest.mark.parametrize(
    ("kappa", "expected"), [(0.0, FUTILITY), (0.5e-4, FUTILITY), (2e-4, ""), (-2e-4, "")]
)
def test_a_run_that_will_hardly_find_anything_may_end(kappa: float, expected: str) -> None:
    assert due(FUTILE_RULE, numbers(kappa=kappa)) == expected


def test_nothing_is_due_that_was_not_asked_for() -> None:
    assert due(Stopping(), numbers()) == ""
    assert due(FUTILE_RULE, numbers(pairs=7)) == ""


def test_power_at_the_end_is_what_was_found() -> None:
    assert (conditional_power(2.0, 1.0), conditional_power(1.9, 1.0)) == (1.0, 0.0)


def test_power_half_way_at_a_trend_of_the_critical_value_is_a_half() -> None:
    # z = 1.96 sqrt(1/2) half way leads to 1.96 at the end; the other side adds less than 1e-7.
    assert conditional_power(1.959963984540054 * 0.5**0.5, 0.5) == pytest.approx(0.5, abs=1e-7)
