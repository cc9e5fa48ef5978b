"""A stand that shows an opening several times: planned, estimated running and off line, all the same."""

import numpy as np
import pytest

from daq.estimate import Running
from daq.itinerary import compose, plan_of
from daq.records import Quality, Reading
from tests.examples import lantern, lantern_rig


def planned():
    measurement = lantern(
        positions__number=3,
        itinerary__laps=6,
        itinerary__opening_order=["C", "ABC", "AB", "ABC", "BC", "BC", "AC", "B", "A", "none"],
    )
    return compose(measurement, lantern_rig()), measurement


def readings(itinerary, rng):
    for number in range(len(itinerary)):
        visit = itinerary.visit(number)
        rate_hz = itinerary.rates_hz[itinerary.position_index[number], itinerary.opening_index[number]]
        yield Reading(
            visit=number,
            attempt=1,
            opening=visit.opening,
            position_mm=visit.position_mm,
            dwell_s=visit.dwell_s,
            gate_open_ns=round(visit.start_s * 1e9),
            gate_close_ns=round((visit.start_s + visit.dwell_s) * 1e9),
            utc_ns=0,
            live_s=visit.dwell_s,
            values=(int(rng.poisson(rate_hz * visit.dwell_s)),),
        )


def test_an_opening_named_twice_is_shown_twice_for_half_its_time_and_neighbours_are_one_visit():
    itinerary, _ = planned()

    first = itinerary.stand == 0
    shown = itinerary.opening[first].tolist()
    if not itinerary.forward[0]:
        shown.reverse()
    assert shown == [4, 7, 3, 7, 6, 5, 2, 1, 0]
    assert itinerary.visits_per_stand == 9
    by_opening = np.bincount(itinerary.opening[first], itinerary.dwell_s[first])
    assert by_opening == pytest.approx([2.2] * 8)
    assert itinerary.dwell_s[first][itinerary.opening[first] == 7] == pytest.approx([1.1, 1.1])


def test_the_estimate_adds_up_the_visits_of_an_opening():
    itinerary, measurement = planned()
    running = Running(plan_of(itinerary, measurement))
    counts = np.zeros((3, 8))
    live_s = np.zeros((3, 8))

    for reading in readings(itinerary, np.random.default_rng(1)):
        running.add(reading)
        cell = itinerary.position_index[reading.visit], itinerary.opening_index[reading.visit]
        counts[cell] += reading.values[0]
        live_s[cell] += reading.live_s
    estimate = running.estimate()

    assert estimate.pairs == 3
    assert estimate.visits == len(itinerary)
    seen_hz = estimate.rates_hz / (1 + estimate.rates_hz * 40e-9)
    assert seen_hz == pytest.approx(counts / live_s, rel=1e-6)


def test_a_stand_that_lacks_one_of_two_visits_of_an_opening_is_not_whole():
    itinerary, measurement = planned()
    running = Running(plan_of(itinerary, measurement))
    lost = int(np.flatnonzero((itinerary.stand == 4) & (itinerary.opening == 7))[1])

    for reading in readings(itinerary, np.random.default_rng(1)):
        if reading.visit != lost:
            running.add(reading)

    assert running.estimate().pairs == 2
    assert running.estimate().stands_used == 17


def test_a_bad_visit_leaves_its_whole_stand_out():
    from dataclasses import replace

    itinerary, measurement = planned()
    running = Running(plan_of(itinerary, measurement))

    for reading in readings(itinerary, np.random.default_rng(1)):
        bad = reading.visit == 10
        running.add(replace(reading, quality=Quality.OVERFLOW) if bad else reading)

    assert running.estimate().pairs == 3
    assert running.estimate().stands_left_out == 1
