"""Each cause makes one concern, with the cost of doing nothing; it wakes only when that is high."""

from typing import Any

import pytest

from daq.estimate.wake import Closed, Danger, Held, cost, dangers

QUIET: dict[str, Any] = {"left_h": 6.0, "planned_h": 10.0, "planned_se": 0.9e-4, "levels": (1.0,) * 50}
FAULT = Held("fault", "axis mask: no reply.", hours=0.6, tries=9)
SHUT = Closed([4100.0, 4200.0], 800.0, 5.0)

CAUSES: dict[str, tuple[dict[str, Any], str]] = {
    "W1 a hold that nothing cures": ({"held": FAULT}, "hold"),
    "W2 no light": ({"dark_stands": 2, "expected_counts": 6e5}, "no-counts"),
    "W3 a rate below half": ({"levels": (1.0, 0.41, 0.4, 0.42)}, "rate"),
    "W4 a run that parked": ({"ended": "axis mask: lost its reference."}, "ended-early"),
    "W5 an interlock": ({"held": Held("interlock", "Pressure is 4e-3 Pa.", 0.2, at_bench=True)}, "hold"),
    "W6 an overload": ({"held": Held("overload", "9.3e6 per second.", 0.0, at_bench=True)}, "hold"),
    "W6b labels that are wrong": ({"held": Held("labels", "AB looks like AC.", 0.0, at_bench=True)}, "hold"),
    "W7 a disk that refuses": ({"refused": "The disk refused visit 8123."}, "storage"),
    "W8 an opening that is wrong": ({"odd_openings": ("",) * 21 + ("AC", "") * 10}, "openings"),
    "W10 a program that was restarted": ({"restarts": 3}, "restarts"),
}


def found(**changes):
    return dangers(Danger(**QUIET | changes))


def test_a_quiet_night_wakes_nobody():
    assert found() == ()


@pytest.mark.parametrize("cause", CAUSES)
def test_each_cause_makes_one_concern_and_its_own(cause):
    changes, kind = CAUSES[cause]

    (one,) = found(**changes)

    assert one.kind == kind
    assert one.what
    assert one.did
    assert one.do
    assert one.cost
    assert one.good


@pytest.mark.parametrize(
    "cause", [cause for cause in CAUSES if cause[:2] in ("W1", "W2", "W3", "W4") or "10" in cause]
)
def test_a_cause_that_costs_little_is_no_call(cause):
    changes, _ = CAUSES[cause]

    (dear,), (cheap,) = found(**changes), found(**changes | {"left_h": 1.0})

    assert dear.wakes
    assert not cheap.wakes


@pytest.mark.parametrize("cause", ["W5 an interlock", "W6 an overload", "W7 a disk that refuses"])
def test_what_may_do_harm_wakes_whatever_it_costs(cause):
    (one,) = found(**CAUSES[cause][0] | {"left_h": 0.1})

    assert one.wakes


def test_the_cost_of_doing_nothing_is_hours_share_and_the_error_bar_at_the_end():
    lost_h, text = cost(Danger(**QUIET | {"left_h": 5.1}))

    assert lost_h == pytest.approx(5.1)
    # ± 0.9e-4 over the square root of the 49 % that are left: 1.286e-4
    assert text == "If nothing is done the run loses 5.1 h (51 %) and ends at ± 0.00013 instead of ± 9e-05."


def test_a_short_hold_and_a_hold_that_was_asked_for_wake_nobody():
    (short,) = found(held=Held("fault", "axis mask: no reply.", 0.2, 5))
    (asked,) = found(held=Held("asked", "Kim asked the run to hold.", 3.0))

    assert not short.wakes
    assert not asked.wakes
    assert "tercet resume" in asked.do


def test_a_fault_that_is_cured_within_a_minute_is_no_news():
    assert found(held=Held("fault", "axis mask: no reply.", 0.5 / 60, 2)) == ()


def test_a_hold_for_the_bench_says_where_it_is_cleared():
    (one,) = found(held=Held("interlock", "Pressure is 4e-3 Pa.", 0.2, at_bench=True))

    assert "at the bench only" in one.do


def test_after_an_overload_kappa_is_in_doubt_and_after_a_lost_link_it_is_not():
    (overload,) = found(held=Held("overload", "9.3e6 per second.", 0.0, at_bench=True))
    (lost,) = found(held=FAULT)

    assert overload.in_doubt
    assert not lost.in_doubt


def test_a_dead_link_does_not_report_the_missing_light_too():
    assert [one.kind for one in found(held=FAULT, dark_stands=5, levels=(0.0,) * 5)] == ["hold"]


def test_a_bright_closed_mask_is_a_note_with_its_factor():
    (one,) = found(closed=SHUT)

    assert one.kind == "closed-mask"
    assert "5.1 times" in one.what
    assert not one.wakes


@pytest.mark.parametrize(
    "closed", [Closed([4100.0, 900.0], 800.0, 5.0), Closed([4100.0, 4200.0], 800.0, 700.0)]
)
def test_one_bright_lap_or_one_within_the_error_is_no_news(closed):
    assert found(closed=closed) == ()


@pytest.mark.parametrize("levels", [(1.0, 0.4, 0.4), (0.4, 0.4, 0.6), (1.6, 1.4, 1.6)])
def test_a_rate_that_is_off_in_fewer_than_three_stands_is_no_news(levels):
    assert found(levels=levels) == ()


def test_a_rate_that_is_too_high_costs_nothing_and_wakes_nobody():
    (one,) = found(levels=(1.6, 1.7, 1.8))

    assert not one.wakes


@pytest.mark.parametrize(
    ("monitor", "word"), [(True, "detector's side"), (False, "source"), (None, "shutter")]
)
def test_the_monitor_says_on_which_side_to_look(monitor, word):
    (one,) = found(dark_stands=2, monitor_lives=monitor)

    assert word in one.do


def test_an_opening_that_is_odd_now_and_then_is_no_news():
    assert found(odd_openings=("",) * 34 + ("AC",) * 7) == ()


def test_nobody_is_called_for_an_opening_while_the_mask_may_still_find_its_reference():
    odd = ("",) * 21 + ("AC", "") * 10

    (concern,) = found(odd_openings=odd, remedy_left=True)

    assert not concern.wakes
    assert concern.did.startswith("The mask finds its reference again")
