from hashlib import sha256

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq import openings
from daq.estimate import kappa
from daq.itinerary import compose, forecast, random_walk_cost, zigzag
from tests.daq.itinerary.rigs import rig_of
from tests.examples import lantern, lantern_rig

CENTRE = {"none": 0, "A": 1, "B": 1, "C": 1, "AB": 4, "AC": 4, "BC": 4, "ABC": 9}


def moments_about_the_middle(itinerary, pair, degree):
    """Return the mean power of the mid-times of each (opening, position) about the middle of a pair."""
    chosen = itinerary.pair == pair
    dwell_s = itinerary.dwell_s[chosen]
    middle_s = itinerary.start_s[chosen] + dwell_s / 2
    centre_s = (itinerary.start_s[chosen][0] + itinerary.start_s[chosen][-1] + dwell_s[-1]) / 2
    scaled = (middle_s - centre_s) / (middle_s.max() - centre_s)
    many = len(itinerary.openings)
    cell = itinerary.position_index[chosen] * many + itinerary.opening_index[chosen]
    return np.bincount(cell, weights=dwell_s * scaled**degree) / np.bincount(cell, weights=dwell_s)


SETTINGS = st.fixed_dictionaries(
    {
        "itinerary__order": st.sampled_from(["zigzag", "searched"]),
        "itinerary__dwell": st.sampled_from(["equal", "best"]),
        "itinerary__dwell_s": st.floats(0.1, 20.0),
        "itinerary__together": st.integers(1, 13),
        "positions__time": st.sampled_from(["uniform", "worth"]),
        "itinerary__laps": st.integers(1, 3).map(lambda half: 2 * half),
        "expect__drift_per_sqrt_hour": st.sampled_from([0.0, 0.01, 0.1]),
    }
)
RIG = st.fixed_dictionaries(
    {
        "axes__mask__speed_mm_s": st.floats(0.5, 50.0),
        "axes__mask__settle_s": st.floats(0.0, 3.0),
        "axes__mask__approach": st.sampled_from(["up", "down"]),
        "axes__mask__takeup_s": st.floats(0.0, 1.0),
        "axes__detector__approach": st.just("up"),
        "axes__detector__takeup_s": st.floats(0.0, 1.0),
    }
)


def uneven_places(positions):
    return [round(-12 + 0.5 * n * (1 + 0.3 * n / positions), 3) for n in range(positions)]


@settings(max_examples=60, deadline=None)
@given(
    slits=st.integers(2, 4),
    positions=st.integers(1, 12),
    seed=st.integers(0, 2**31),
    wishes=SETTINGS,
    rig=RIG,
)
def test_every_odd_moment_of_a_pair_vanishes_whatever_dwell_and_moves(slits, positions, seed, wishes, rig):
    time = wishes.pop("positions__time")
    places = {"list_mm": uneven_places(positions), "time": time}
    measurement = lantern(positions=places, itinerary__search_evaluations=20_000, **wishes)

    itinerary = compose(measurement, rig_of(slits, **rig), seed)

    for pair in range(itinerary.planned_pairs):
        for degree in (1, 3, 5):
            assert np.abs(moments_about_the_middle(itinerary, pair, degree)).max() < 1e-12


@settings(max_examples=20, deadline=None)
@given(seed=st.integers(0, 2**31), repeats=st.integers(2, 3), together=st.integers(1, 3))
def test_a_word_that_shows_openings_several_times_is_mirrored_too(seed, repeats, together):
    measurement = lantern(
        positions__number=5,
        itinerary__laps=4,
        itinerary__order="searched",
        itinerary__repeats=repeats,
        itinerary__together=together,
        expect__drift_per_sqrt_hour=0.3,
        itinerary__search_evaluations=900_000,
    )

    itinerary = compose(measurement, lantern_rig(), seed)

    assert itinerary.visits_per_stand > 8
    for pair in range(2):
        for degree in (1, 3, 5):
            assert np.abs(moments_about_the_middle(itinerary, pair, degree)).max() < 1e-12


def test_a_take_up_makes_the_other_direction_wait_as_long():
    rig = lantern_rig(axes__mask__approach="up", axes__mask__takeup_s=0.4)
    plain, padded = compose(lantern(), lantern_rig()), compose(lantern(), rig)

    within = np.flatnonzero(np.diff(padded.stand) == 0)
    longer_s = np.diff(padded.start_s)[within] - np.diff(plain.start_s)[within]

    assert longer_s == pytest.approx(0.4)


@given(
    positions=st.integers(1, 9),
    laps=st.integers(1, 6),
    coins=st.lists(st.booleans(), min_size=3, max_size=3),
    together=st.integers(1, 9),
    fly_back=st.booleans(),
)
def test_every_opening_is_shown_at_every_position_once_a_lap(positions, laps, coins, together, fly_back):
    order = zigzag(range(8), positions, laps, np.array(coins), together, fly_back)

    cells = (order.lap * positions + order.position) * 8 + order.opening

    assert (np.bincount(cells, minlength=8 * positions * laps) == 1).all()
    assert (np.bincount(order.stand, minlength=positions * laps) == 8).all()
    assert (np.bincount(order.stand * positions + order.position) <= 8).all()


@pytest.mark.parametrize("order", ["zigzag", "searched", "cyclic", "random", "blocked"])
@pytest.mark.parametrize("slits", [2, 3, 4, 5])
def test_counting_time_and_visits_are_what_was_asked_for(order, slits):
    measurement = lantern(
        positions__number=7, itinerary__laps=6, itinerary__order=order, itinerary__search_evaluations=20_000
    )

    itinerary = compose(measurement, rig_of(slits))

    many = 2**slits
    cell = itinerary.position_index * many + itinerary.opening_index
    assert (np.bincount(cell, minlength=7 * many) == 6).all()
    assert np.bincount(cell, itinerary.dwell_s) == pytest.approx(6 * 2.2)


@settings(max_examples=40, deadline=None)
@given(
    positions=st.integers(3, 80), fly_back=st.booleans(), together=st.integers(1, 4), seed=st.integers(0, 99)
)
def test_every_opening_stands_as_often_early_as_late_at_every_position(positions, fly_back, together, seed):
    measurement = lantern(
        positions={"start_mm": -12.0, "stop_mm": 12.0, "number": positions},
        itinerary__laps=6,
        itinerary__fly_back=fly_back,
        itinerary__together=together,
    )

    itinerary = compose(measurement, lantern_rig(), seed)

    by_stand = np.lexsort((itinerary.start_s, itinerary.stand))
    rank = np.empty(len(itinerary))
    rank[by_stand] = np.tile(np.arange(8), positions * 6)
    cell = itinerary.position_index * 8 + itinerary.opening_index
    assert np.bincount(cell, rank) / 6 == pytest.approx(3.5)


def test_laps_that_fly_back_over_an_even_number_of_positions_are_repaired_and_say_so():
    measurement = lantern(positions__number=40, itinerary__fly_back=True)

    itinerary = compose(measurement, lantern_rig())

    assert any("fly back" in note for note in itinerary.notes)


def first_moments_at_each_position(itinerary, pair):
    return moments_about_the_middle(itinerary, pair, 1).reshape(-1, len(itinerary.openings))


@pytest.mark.parametrize("positions", [5, 6])
def test_laps_that_fly_back_still_cancel_a_linear_drift(positions):
    measurement = lantern(positions__number=positions, itinerary__laps=4, itinerary__fly_back=True)

    itinerary = compose(measurement, lantern_rig())

    for pair in range(2):
        moments = first_moments_at_each_position(itinerary, pair)
        assert np.ptp(moments, axis=1).max() < 1e-12


@pytest.mark.parametrize("slits", [2, 3, 4, 5])
def test_no_visit_leaves_the_limits_of_an_axis(slits):
    rig = rig_of(slits)

    itinerary = compose(lantern(itinerary__laps=2), rig)

    low_mm, high_mm = rig.axes["detector"].limits_mm
    assert low_mm <= itinerary.position_mm.min() <= itinerary.position_mm.max() <= high_mm
    at_mm = [rig.mask_at_mm(int(mask)) for mask in np.unique(itinerary.opening)]
    low_mm, high_mm = rig.axes["mask"].limits_mm
    assert low_mm <= min(at_mm) <= max(at_mm) <= high_mm


def test_a_million_visits_are_composed_and_forecast():
    measurement = lantern(positions__number=1250, itinerary__laps=100)

    itinerary = compose(measurement, lantern_rig())
    expected = forecast(itinerary, measurement)

    assert len(itinerary) == expected.visits == 1_000_000
    assert np.all(np.diff(itinerary.start_s) > 2.2)
    assert np.abs(moments_about_the_middle(itinerary, 49, 1)).max() < 1e-12


def test_forward_and_backward_stands_are_equal_at_every_position():
    itinerary = compose(lantern(), lantern_rig())
    first = itinerary.opening.reshape(-1, 8)[:, 0]
    position = itinerary.position_index.reshape(-1, 8)[:, 0]

    forward = np.bincount(position, weights=first == openings.mask("A"))

    assert (forward == 19).all()


@pytest.mark.parametrize(
    "wishes",
    [
        {},
        {"itinerary__order": "searched"},
        {"itinerary__order": "searched", "itinerary__repeats": 2, "expect__drift_per_sqrt_hour": 0.2},
        {"itinerary__dwell": "best"},
        {"itinerary__dwell": "best", "positions__time": "worth"},
        {"itinerary__together": 4},
        {"itinerary__fly_back": True},
        {"itinerary__fly_back": True, "positions__number": 40},
    ],
)
def test_a_linear_drift_leaves_kappa_alone(wishes):
    rig = lantern_rig(axes__mask__approach="down", axes__mask__takeup_s=0.3)
    itinerary = compose(lantern(**wishes), rig)

    assert abs(kappa_of_a_source(itinerary, 1 - 0.03 / 3600 * middles_s(itinerary))) < 1e-9


def middles_s(itinerary):
    return itinerary.start_s + itinerary.dwell_s / 2


def kappa_of_a_source(itinerary, level):
    """Return kappa of a night without noise whose source has a strength by visit."""
    many = len(itinerary.openings)
    cell = itinerary.position_index * many + itinerary.opening_index
    mean_level = np.bincount(cell, itinerary.dwell_s * level) / np.bincount(cell, itinerary.dwell_s)
    rates = itinerary.rates_hz * mean_level.reshape(-1, many)
    named = {openings.name(mask): rates[:, mask] for mask in range(many)}
    value, _ = kappa(named, named, itinerary.weights, signs=itinerary.signs)
    return value


def test_without_padding_a_take_up_in_one_direction_would_let_a_linear_drift_in():
    rig = lantern_rig()
    itinerary = compose(lantern(), rig)
    at_mm = np.array([rig.mask_at_mm(mask) for mask in range(8)])[itinerary.opening]
    later_s = 0.3 * np.cumsum(np.diff(at_mm, prepend=at_mm[0]) < 0)

    value = kappa_of_a_source(itinerary, 1 - 0.03 / 3600 * (middles_s(itinerary) + later_s))

    assert abs(value) > 1e-7


# The visits of the reference night: a rehearsal's digest rests on them.
REFERENCE = "91275bda085818508454a1026dc18933c2e7758293125b8b7bbc4d9951eb721d"


def test_the_reference_night_is_what_it_always_was():
    itinerary = compose(lantern(), lantern_rig())

    columns = (
        *(itinerary.opening, np.round(itinerary.position_mm * 1000), np.round(itinerary.dwell_s * 1000)),
        *(itinerary.stand, itinerary.lap, itinerary.pair, itinerary.forward),
        np.round(itinerary.start_s * 1000),
    )
    digest = sha256(b"".join(np.asarray(column).astype("<i8").tobytes() for column in columns))

    assert digest.hexdigest() == REFERENCE


def test_the_same_night_in_blocked_order_is_off_by_twenty_counting_standard_errors():
    itinerary = compose(lantern(itinerary__order="blocked"), lantern_rig())

    value = kappa_of_a_source(itinerary, 1 - 0.05 * itinerary.start_s / itinerary.total_s)

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
