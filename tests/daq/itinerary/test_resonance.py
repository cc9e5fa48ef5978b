import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.errors import DescriptionError
from daq.itinerary import compose
from daq.itinerary.pilot import Ripple
from daq.itinerary.resonance import Rhythm, free, harmonic, in_step
from tests.examples import lantern, lantern_rig

BEAT = Rhythm(stand_s=20.0, pair_s=1800.0, pairs=20)


@pytest.mark.parametrize(
    ("period_s", "near"),
    [(20.0, 20.0), (20.9, 20.9), (21.1, None), (40.0, 20.0), (41.5, 20.75), (43.0, None), (10.0, None)],
)
def test_a_stand_is_in_step_within_five_percent_of_a_line_or_of_its_half(period_s, near):
    assert in_step(BEAT, Ripple(period_s)) == near


@pytest.mark.parametrize(
    ("period_s", "number"),
    [
        (1800.0, 1),
        (900.0, 2),
        (600.0, 3),
        (900.0 * (1 - 0.02), 2),
        (900.0 * (1 - 0.03), None),
        (4000.0, None),
    ],
)
def test_a_line_within_one_resolution_of_a_harmonic_cannot_be_told_from_it(period_s, number):
    assert harmonic(BEAT, Ripple(period_s)) == number


def test_a_line_that_is_not_known_well_is_near_more_harmonics():
    assert harmonic(BEAT, Ripple(860.0)) is None
    assert harmonic(BEAT, Ripple(860.0, period_u_s=25.0)) == 2


def test_only_even_harmonics_and_stands_in_step_need_a_measure():
    assert free(BEAT, (Ripple(1800.0), Ripple(600.0)))
    assert not free(BEAT, (Ripple(900.0),))
    assert not free(BEAT, (Ripple(20.0),))


def stand_and_pair_s(itinerary):
    """Return the mean length of a stand and of a pair without pauses."""
    stands = np.flatnonzero(np.diff(itinerary.stand, prepend=-1))
    pairs = np.flatnonzero(np.diff(itinerary.pair, prepend=-1))
    start_s = itinerary.start_s[pairs]
    pause_s = np.array([itinerary.pauses.get(int(at), 0.0) for at in pairs])
    longest = len(itinerary.positions_mm) * 2
    return (itinerary.start_s[stands[longest - 1]] - start_s[0]) / (longest - 1), np.mean(
        np.diff(start_s) - pause_s[1:]
    )


@settings(max_examples=30, deadline=None)
@given(periods_s=st.lists(st.floats(10.0, 4000.0), min_size=1, max_size=3))
def test_no_stand_keeps_step_with_a_known_line(periods_s):
    lines = [{"period_s": period_s} for period_s in periods_s]

    itinerary = compose(lantern(expect__lines=lines), lantern_rig())

    stand_s, _ = stand_and_pair_s(itinerary)
    for period_s in periods_s:
        # the mean stand of this check leaves out the turns, by 0.1 s of 23 s at most: half a percent
        assert abs(stand_s / period_s - 1) > 0.045
        assert abs(2 * stand_s / period_s - 1) > 0.045


def test_a_line_at_the_stand_gets_another_dwell_with_the_reason():
    plain = compose(lantern(), lantern_rig())
    stand_s, _ = stand_and_pair_s(plain)

    itinerary = compose(lantern(expect__lines=[{"period_s": stand_s}]), lantern_rig())

    assert itinerary.dwell_s[0] != 2.2
    assert round(itinerary.dwell_s[0] * 10, 6) == round(itinerary.dwell_s[0] * 10)
    assert f"Dwell {itinerary.dwell_s[0]:g} s instead of 2.2 s" in itinerary.notes[0]
    assert "within 5 %" in itinerary.notes[0]


def test_a_line_at_an_even_harmonic_of_the_pair_gets_another_dwell_with_the_reason():
    _, pair_s = stand_and_pair_s(compose(lantern(), lantern_rig()))

    itinerary = compose(lantern(expect__lines=[{"period_s": pair_s / 2}]), lantern_rig())

    _, now_s = stand_and_pair_s(itinerary)
    assert abs(now_s / (pair_s / 2) - 2) > 1 / 19
    assert "fits 2 times into a pair" in itinerary.notes[0]
    assert not itinerary.pauses


@pytest.mark.parametrize("number", [1, 3])
def test_a_line_at_an_odd_harmonic_is_left_to_the_coin_and_told(number):
    _, pair_s = stand_and_pair_s(compose(lantern(), lantern_rig()))

    itinerary = compose(lantern(expect__lines=[{"period_s": pair_s / number}]), lantern_rig())

    assert (itinerary.dwell_s == 2.2).all()
    assert any(f"fits {number} times" in note and "coin" in note for note in itinerary.notes)


def comb(pair_s):
    """Return lines near an even harmonic of the pair at every dwell nearby."""
    return [{"period_s": pair_s / 2, "period_u_s": pair_s / 2}]


def test_where_no_dwell_avoids_the_lines_pairs_begin_after_a_random_pause():
    _, pair_s = stand_and_pair_s(compose(lantern(), lantern_rig()))
    measurement = lantern(expect__lines=comb(pair_s))

    itinerary, again = (compose(measurement, lantern_rig(), 3) for _ in range(2))

    starts = np.flatnonzero(np.diff(itinerary.pair)) + 1
    assert sorted(itinerary.pauses) == starts.tolist()
    assert itinerary.pauses == again.pauses
    lengths_s = np.array(list(itinerary.pauses.values()))
    assert 0 <= lengths_s.min() < lengths_s.max() <= pair_s / 4 * 1.2
    assert any("random pause" in note for note in itinerary.notes)
    assert [itinerary.visit(int(at)).pause_s for at in starts] == lengths_s.tolist()
    waited_s = np.diff(itinerary.start_s)[starts - 1] - itinerary.dwell_s[starts - 1]
    assert (waited_s >= lengths_s).all()
    assert itinerary.visit(1).pause_s == 0


def test_lines_that_no_dwell_avoids_are_refused_with_a_sentence():
    lines = [{"period_s": 5.0 * 1.04**step} for step in range(90)]

    with pytest.raises(DescriptionError, match=r"no dwell from .* 5 % off every line"):
        compose(lantern(expect__lines=lines), lantern_rig())


def test_orders_for_comparison_are_left_alone():
    stand_s, _ = stand_and_pair_s(compose(lantern(), lantern_rig()))

    itinerary = compose(
        lantern(itinerary__order="cyclic", expect__lines=[{"period_s": stand_s}]), lantern_rig()
    )

    assert (itinerary.dwell_s == 2.2).all()
    assert any("a linear drift of the source does not cancel" in note for note in itinerary.notes)


def test_a_dwell_that_is_no_multiple_of_the_mains_is_told():
    notes = compose(lantern(itinerary__dwell_s=2.25), lantern_rig()).notes

    assert any("no whole multiple of 0.1 s" in note for note in notes)
