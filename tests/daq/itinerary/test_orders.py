import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq import openings
from daq.estimate import kappa
from daq.itinerary import compose, forecast, random_walk_cost, zigzag
from tests.examples import lantern, lantern_rig

CENTRE = {"none": 0, "A": 1, "B": 1, "C": 1, "AB": 4, "AC": 4, "BC": 4, "ABC": 9}


def moments_about_the_middle(itinerary, pair, degree):
    """Return the mean power of the mid-times of each (opening, position) about the middle of a pair."""
    chosen = itinerary.pair == pair
    middle_s = itinerary.start_s[chosen] + itinerary.dwell_s[chosen] / 2
    centre_s = (itinerary.start_s[chosen][0] + middle_s.max() + itinerary.dwell_s[chosen][-1] / 2) / 2
    scaled = (middle_s - centre_s) / (middle_s.max() - centre_s)
    cell = itinerary.position_index[chosen] * 8 + itinerary.opening_index[chosen]
    return np.bincount(cell, weights=scaled**degree) / np.bincount(cell)


@settings(max_examples=40, deadline=None)
@given(
    positions=st.integers(1, 12),
    laps=st.integers(1, 3).map(lambda half: 2 * half),
    seed=st.integers(0, 2**31),
    dwell_s=st.floats(0.1, 20.0),
    speed_mm_s=st.floats(0.5, 50.0),
    settle_s=st.floats(0.0, 3.0),
)
def test_every_odd_moment_of_a_pair_vanishes_whatever_dwell_and_moves(
    positions, laps, seed, dwell_s, speed_mm_s, settle_s
):
    places = {"list_mm": [round(-12 + 0.5 * n * (1 + 0.3 * n / positions), 3) for n in range(positions)]}
    measurement = lantern(positions=places, itinerary__laps=laps, itinerary__dwell_s=dwell_s)
    rig = lantern_rig(axes__mask__speed_mm_s=speed_mm_s, axes__mask__settle_s=settle_s)

    itinerary = compose(measurement, rig, seed)

    for pair in range(laps // 2):
        for degree in (1, 3, 5):
            assert np.abs(moments_about_the_middle(itinerary, pair, degree)).max() < 1e-12


@given(
    positions=st.integers(1, 9), laps=st.integers(1, 6), coins=st.lists(st.booleans(), min_size=3, max_size=3)
)
def test_every_opening_is_shown_at_every_position_once_a_lap(positions, laps, coins):
    order = zigzag(range(8), positions, laps, np.array(coins))

    cells = order.position * 8 + order.opening

    assert (np.bincount(cells, minlength=8 * positions) == laps).all()


def test_forward_and_backward_stands_are_equal_at_every_position():
    itinerary = compose(lantern(), lantern_rig())
    first = itinerary.opening.reshape(-1, 8)[:, 0]
    position = itinerary.position_index.reshape(-1, 8)[:, 0]

    forward = np.bincount(position, weights=first == openings.mask("A"))

    assert (forward == 19).all()


def test_a_linear_drift_leaves_kappa_alone():
    itinerary = compose(lantern(), lantern_rig())
    middle_s = itinerary.start_s + itinerary.dwell_s / 2
    level = 1 - 0.03 / 3600 * middle_s
    cell = itinerary.position_index * 8 + itinerary.opening_index

    mean_level = (np.bincount(cell, weights=level) / np.bincount(cell)).reshape(41, 8)
    rates = itinerary.rates_hz * mean_level
    named = {openings.name(mask): rates[:, mask] for mask in range(8)}
    value, _ = kappa(named, named, itinerary.weights, signs=itinerary.signs)

    assert abs(value) < 1e-9


def test_the_same_night_in_blocked_order_is_off_by_twenty_counting_standard_errors():
    itinerary = compose(lantern(itinerary__order="blocked"), lantern_rig())
    level = 1 - 0.05 * itinerary.start_s / itinerary.total_s
    cell = itinerary.position_index * 8 + itinerary.opening_index

    mean_level = (np.bincount(cell, weights=level) / np.bincount(cell)).reshape(41, 8)
    rates = itinerary.rates_hz * mean_level
    named = {openings.name(mask): rates[:, mask] for mask in range(8)}
    value, _ = kappa(named, named, itinerary.weights, signs=itinerary.signs)

    assert abs(value) > 20 * forecast(itinerary, lantern()).kappa_counting_se


def test_the_reference_night_has_the_length_that_its_moves_add_up_to():
    itinerary = compose(lantern(), lantern_rig(), seed=0)
    turned = np.flatnonzero(np.diff(itinerary.opening) == 0)

    stands = 38 * 41
    inside_s = stands * (8 * 2.2 + 7 * 0.7)
    between_s = 38 * 40 * 0.32
    pairs_turned = int((itinerary.forward[::656][1:] != itinerary.forward[::656][:-1]).sum())
    laps_turned_s = (37 - pairs_turned) * 0.1 + pairs_turned * 1.9

    assert len(itinerary) == 12464
    assert turned.size == stands - 1 - pairs_turned
    assert itinerary.total_s == pytest.approx(inside_s + between_s + laps_turned_s, abs=1e-6)


def test_coins_come_from_the_seed():
    first, again, other = (compose(lantern(), lantern_rig(), seed).forward[::656] for seed in (5, 5, 6))

    assert (first == again).all()
    assert (first != other).any()
    assert 0 < first.mean() < 1


def test_a_blocked_order_counts_the_sweeps_of_each_opening_as_laps():
    itinerary = compose(lantern(itinerary__order="blocked", itinerary__laps=4), lantern_rig())

    assert (np.diff(np.flatnonzero(np.diff(itinerary.opening))) == 4 * 41).all()
    assert itinerary.planned_pairs == 2
    assert (itinerary.pair == itinerary.lap // 2).all()
    assert (np.bincount(itinerary.stand) == 8).all()


def test_an_odd_lap_is_in_no_complete_pair():
    itinerary = compose(lantern(itinerary__laps=5), lantern_rig())

    assert itinerary.planned_pairs == 2
    assert itinerary.lap.max() == 4


# Order facts: analytic worked examples with unit amplitudes and equal phases (patterns 0, 1, 4, 9), computed
# by hand as the sum of squared partial sums of the signed patterns.
@pytest.mark.parametrize(
    ("order", "cost"),
    [
        ("none A B C AB AC BC ABC", 121.0),
        ("none A B AB C AC ABC BC", 51.0),
        ("C AB ABC BC AC B A none", 55.0),
    ],
)
def test_the_cost_of_a_random_walk_is_the_sum_of_squared_partial_sums(order, cost):
    assert random_walk_cost(order.split(), CENTRE) == cost


def test_no_order_at_the_centre_costs_less_than_fifty_one():
    from itertools import permutations

    signed = np.array([openings.sign(name, 3) * CENTRE[name] for name in openings.names(3)])
    orders = np.array(list(permutations(range(8))))

    costs = (np.cumsum(signed[orders], axis=1) ** 2).sum(axis=1)

    assert costs.min() == 51


def test_the_forecast_of_the_reference_night_meets_its_goal():
    measurement = lantern()
    expected = forecast(compose(measurement, lantern_rig()), measurement)

    assert expected.visits == 12464
    assert expected.pairs == 19
    assert expected.kappa_counting_se < expected.kappa_se < 1e-4
    assert expected.goal_s is not None
    assert expected.goal_s < expected.total_s
    assert expected.duty == pytest.approx(expected.live_s / expected.total_s)
