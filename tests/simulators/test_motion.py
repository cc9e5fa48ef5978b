"""Motion: where an axis is, was and believes to be."""

from __future__ import annotations

from simulators.motion import Track

S = 1_000_000_000


def test_an_axis_can_be_asked_where_it_was_on_earlier_legs() -> None:
    track = Track(0.0, 0.0, homed=True)
    track.go(10 * S, 10.0, 10.0)
    track.go(20 * S, 0.0, 5.0)

    places = [track.true_mm(at * S // 2) for at in (0, 20, 21, 22, 30, 40, 42, 44, 50)]

    assert places == [0.0, 0.0, 5.0, 10.0, 10.0, 10.0, 5.0, 0.0, 0.0]


def test_starts_and_stops_within_a_time_are_listed() -> None:
    track = Track(0.0, 0.0, homed=True)
    track.go(10 * S, 10.0, 10.0)
    track.go(20 * S, 0.0, 5.0)

    moments = sorted(track.moments(10 * S, 22 * S))

    assert moments == [11 * S, 20 * S]


def test_homing_again_keeps_the_place_and_is_lost_on_the_way() -> None:
    track = Track(5.0, 0.0, homed=True)

    track.home(S, 10.0)

    assert (track.homed(S), track.shown_mm(S), track.target_mm(S)) == (False, 5.0, 0.0)
    assert track.homed(S + S // 2)
