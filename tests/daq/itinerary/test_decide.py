"""What the planner decides, and that it says why."""

import pytest

from daq.itinerary import compose, forecast
from tests.daq.itinerary.rigs import without_dwell
from tests.examples import lantern, lantern_rig

NARROW = {"positions": {"start_mm": -6.4, "stop_mm": 6.4, "number": 21}, "itinerary__laps": 2}


@pytest.mark.parametrize(("settle_s", "together"), [(0.5, {1}), (10.0, {3, 4, 5, 6, 7, 8})])
def test_neighbouring_positions_are_swept_together_only_where_a_mask_move_is_slow(settle_s, together):
    measurement = without_dwell(**NARROW, itinerary__together=0)

    itinerary = compose(measurement, lantern_rig(axes__mask__settle_s=settle_s))

    assert itinerary.design is not None
    assert itinerary.design.together in together
    assert f"Positions swept together: {itinerary.design.together}," in itinerary.notes[0]
    assert "21: " in itinerary.notes[0]


def test_the_number_swept_together_is_the_best_of_those_tried():
    rig = lantern_rig(axes__mask__settle_s=10.0)
    wishes = {**NARROW, "itinerary__dwell_s": 4.0}
    chosen = lantern(**wishes, itinerary__together=0)

    q = {}
    for together in (1, 2, 4, 6, 8, 21):
        plan = lantern(**wishes, itinerary__together=together)
        q[together] = forecast(compose(plan, rig), plan).q

    # a pair by itself leaves out the turn to the next one, 0.1 s of minutes
    assert forecast(compose(chosen, rig), chosen).q <= min(q.values()) * 1.001
    assert min(q, key=q.__getitem__) != 21


def test_a_chosen_dwell_comes_with_the_range_that_costs_little_and_with_what_was_counted_on():
    measurement = without_dwell(**NARROW)

    itinerary = compose(measurement, lantern_rig())

    dwell, counted_on = itinerary.notes
    assert dwell.startswith(f"Dwell {itinerary.dwell_s[0]:g} s, the least time x variance")
    low_s, high_s = (float(part) for part in dwell.split("; ")[1].split(" s cost")[0].split(" to "))
    assert low_s < itinerary.dwell_s[0] < high_s
    assert counted_on == "Counted on: a random walk of 1 % per square root of an hour."


def test_a_searched_order_is_told_with_how_it_was_found_and_what_it_saves():
    natural = {
        name: {"at_mm": 2.0 * at} for at, name in enumerate(["none", "A", "B", "C", "AB", "AC", "BC", "ABC"])
    }
    measurement = lantern(**NARROW, itinerary__order="searched", expect__drift_per_sqrt_hour=0.1)

    (note,) = compose(measurement, lantern_rig(mask__openings=natural)).notes

    assert "all 40320 orders" in note
    assert "% less time than along the mask" in note


def test_a_rig_laid_out_in_the_best_order_needs_no_search():
    measurement = lantern(**NARROW, itinerary__order="searched", expect__drift_per_sqrt_hour=0.0)

    (note,) = compose(measurement, lantern_rig()).notes

    assert note == "Order searched: none is better than along the mask."


def test_words_and_dwell_are_chosen_together_and_pay_where_moves_are_slow_and_the_drift_is_strong():
    rig = lantern_rig(axes__mask__settle_s=3.0)
    wishes = {**NARROW, "itinerary__order": "searched", "expect__drift_per_sqrt_hour": 0.2}

    once, twice = (
        forecast(compose(plan, rig), plan).q
        for plan in (without_dwell(**wishes), without_dwell(**wishes, itinerary__repeats=2))
    )

    assert twice < 0.9 * once
