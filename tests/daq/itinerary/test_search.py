from dataclasses import replace
from itertools import permutations

import numpy as np
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from daq import openings
from daq.itinerary import compose, forecast
from daq.itinerary.search import Stand, search
from tests.daq.itinerary.rigs import rig_of
from tests.examples import lantern, lantern_rig

PLENTY = 10**9


def stand(many, positions, seed, walk_per_s):
    """Return a stand with random weights (of sum zero at each position), dwell and places on the mask."""
    rng = np.random.default_rng(seed)
    weight = rng.normal(size=(positions, many))
    weight -= weight.mean(axis=1, keepdims=True)
    at_mm = rng.permutation(many)
    between_s = 0.5 + 0.2 * np.abs(at_mm[:, None] - at_mm)
    np.fill_diagonal(between_s, 0.0)
    dwell_s = rng.uniform(0.5, 4.0, (positions, many))
    return Stand(weight, dwell_s, between_s, float(dwell_s.sum()), positions, walk_per_s, 1.0)


def cost_by_hand(of, slots, times):
    """Return time x variance of a word, gate by gate and position by position."""
    drift, travel_s = 0.0, 0.0
    shown = np.zeros(of.weight.shape[0])
    for at, slot in enumerate(slots):
        if at:
            travel_s += of.between_s[slots[at - 1], slot]
            drift += of.between_s[slots[at - 1], slot] * (shown**2).sum()
        step = of.weight[:, slot] / times
        inside = shown**2 + shown * step + step**2 / 3
        drift += (of.dwell_s[:, slot] / times * inside).sum()
        shown = shown + step
    return (of.counting_var + of.walk_per_s * drift) * (of.still_s + of.stands * travel_s)


@settings(max_examples=25, deadline=None)
@given(seed=st.integers(0, 10**6), walk=st.floats(0.0, 3.0))
@example(seed=8016, walk=0.375)  # its best order is no neighbour of the one that the first price gives
def test_no_order_of_five_openings_costs_less_than_the_one_found(seed, walk):
    of = stand(5, 3, seed, walk)

    found = search(of, range(5), 1, PLENTY, np.random.default_rng(0))

    least = min(cost_by_hand(of, order, 1) for order in permutations(range(5)))
    assert found.exhaustive
    assert found.cost == pytest.approx(cost_by_hand(of, found.slots, 1), rel=1e-12)
    assert found.cost == pytest.approx(least, rel=1e-12)


def test_no_order_of_three_openings_shown_twice_costs_less_than_the_one_found():
    for seed in range(10):
        of = stand(3, 2, seed, 2.0)

        found = search(of, range(3), 2, PLENTY, np.random.default_rng(0))

        twice = min(cost_by_hand(of, order, 2) for order in set(permutations([0, 0, 1, 1, 2, 2])))
        once = min(cost_by_hand(of, order, 1) for order in permutations(range(3)))
        assert found.cost == pytest.approx(min(once, twice), rel=1e-12)


def test_none_of_all_40320_orders_of_the_lantern_rig_is_better_than_the_one_found():
    of = stand(8, 41, 3, 0.01)

    found = search(of, range(8), 1, PLENTY, np.random.default_rng(0))

    every = np.array(list(permutations(range(8))))
    step = of.weight.T[every]
    after = np.cumsum(step, axis=1)
    before = after - step
    between_s = of.between_s[every[:, :-1], every[:, 1:]]
    drift = np.einsum("wi,wij->w", between_s, after[:, :-1] ** 2)
    drift += np.einsum("wij,wij->w", of.dwell_s.T[every], before**2 + before * after + after**2) / 3
    assert len(every) == 40320
    assert found.cost == pytest.approx(of.cost(drift, between_s.sum(axis=1)).min(), rel=1e-12)


def test_exchanges_find_what_weighing_everything_finds():
    of = stand(8, 41, 4, 0.01)

    annealed = search(of, range(8), 1, 16_000, np.random.default_rng(1))
    exhaustive = search(of, range(8), 1, PLENTY, np.random.default_rng(1))

    assert not annealed.exhaustive
    assert annealed.cost < 1.25 * exhaustive.cost


@pytest.mark.parametrize("budget", [1, 5_000, 100_000])
def test_a_search_stays_within_its_budget_and_repeats_itself(budget):
    of = stand(8, 5, 5, 0.1)

    found, again = (search(of, range(8), 1, budget, np.random.default_rng(7)) for _ in range(2))

    assert found == again
    assert found.evaluations <= max(budget, 64 * 8)  # one round of exchanges is the least
    assert sorted(found.slots) == list(range(8))


@pytest.mark.parametrize(("slits", "gain"), [(4, 0.15), (5, 0.1)])
def test_sixteen_and_thirty_two_openings_are_searched(slits, gain):
    rig = rig_of(slits)
    wishes = {"positions__number": 11, "expect__drift_per_sqrt_hour": 0.1, "itinerary__laps": 2}
    plain = lantern(**wishes)
    searched = lantern(**wishes, itinerary__order="searched", itinerary__search_evaluations=500_000)

    along, found = compose(plain, rig), compose(searched, rig)

    assert sorted(found.opening[: 2**slits].tolist()) == list(range(2**slits))
    assert forecast(found, searched).q < (1 - gain) * forecast(along, plain).q


def test_exchanges_of_sixteen_openings_come_within_one_percent_of_all_orders():
    rig = rig_of(4)
    wishes = {"positions__number": 11, "expect__drift_per_sqrt_hour": 0.1, "itinerary__laps": 2}

    q = {}
    for budget in (500_000, 110_000_000):
        plan = lantern(**wishes, itinerary__order="searched", itinerary__search_evaluations=budget)
        itinerary = compose(plan, rig)
        q[budget] = forecast(itinerary, plan).q
        assert ("annealed" in itinerary.notes[0]) == (budget == 500_000)

    assert q[500_000] <= 1.01 * q[110_000_000]


def test_the_same_seed_searches_the_same_order():
    rig, measurement = (
        rig_of(5),
        lantern(
            positions__number=5,
            itinerary__laps=2,
            itinerary__order="searched",
            itinerary__search_evaluations=200_000,
            expect__drift_per_sqrt_hour=0.2,
        ),
    )

    first, again, other = (compose(measurement, rig, seed).opening for seed in (3, 3, 4))

    assert (first == again).all()
    assert (first != other).any()


NATURAL = {
    name: {"at_mm": 2.0 * at} for at, name in enumerate(["none", "A", "B", "C", "AB", "AC", "BC", "ABC"])
}


@pytest.mark.parametrize("settle_s", [0.1, 0.5, 3.0])
@pytest.mark.parametrize("drift", [0.0, 0.01, 0.03, 0.1])
def test_a_searched_order_is_never_worse_than_any_other(settle_s, drift):
    rig = lantern_rig(axes__mask__settle_s=settle_s, mask__openings=NATURAL)
    wishes = {"positions__number": 11, "itinerary__laps": 4, "expect__drift_per_sqrt_hour": drift}

    q = {
        order: forecast(compose(measurement, rig), measurement).q
        for order in ("searched", "zigzag", "cyclic", "random")
        for measurement in [lantern(**wishes, itinerary__order=order)]
    }

    assert q["searched"] <= min(q.values()) * (1 + 1e-9)


def test_showing_openings_several_times_pays_under_strong_drift_and_never_costs():
    rig = lantern_rig(mask__openings=NATURAL)
    wishes = {"itinerary__laps": 2, "itinerary__order": "searched"}
    for drift, gain in ((0.0, 0.0), (0.2, 0.05)):
        once = lantern(**wishes, expect__drift_per_sqrt_hour=drift)
        twice = lantern(**wishes, expect__drift_per_sqrt_hour=drift, itinerary__repeats=2)

        costs = [forecast(compose(one, rig), one).q for one in (once, twice)]

        assert costs[1] <= costs[0] * (1 - gain) * (1 + 1e-9)


def test_without_drift_the_order_of_least_travel_is_found():
    rig = lantern_rig(mask__openings=NATURAL)
    measurement = lantern(itinerary__order="searched", itinerary__laps=2, expect__drift_per_sqrt_hour=0.0)

    itinerary = compose(measurement, rig)

    order = [openings.name(int(mask)) for mask in itinerary.opening[:8]]
    assert order in (list(NATURAL), list(NATURAL)[::-1])


def test_a_stand_that_weighs_nothing_costs_its_time():
    of = replace(stand(4, 2, 1, 0.0), counting_var=2.0)

    found = search(of, range(4), 1, PLENTY, np.random.default_rng(0))

    assert found.cost == pytest.approx(2.0 * (of.still_s + 2 * (3 * 0.5 + 3 * 0.2)))
