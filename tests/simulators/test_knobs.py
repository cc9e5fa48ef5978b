"""Knobs: a bench whose knobs nobody has turned is as described, to the last digit; turned ones act."""

from __future__ import annotations

import pytest

from simulators.knobs import Knobs
from simulators.settings import DialSettings

DIAL = DialSettings(now=1000, knee=870, blur=15, slope=4e-5, dark_e=70)


def test_without_a_turn_nothing_is_otherwise() -> None:
    knobs = Knobs(DIAL, 4e3)

    assert (knobs.passed, knobs.room_hz, knobs.seen(3e5), knobs.darker()) == (1.0, 0.0, 1.0, 1.0)


def test_half_of_the_pulses_are_lost_at_the_knee_and_dark_counts_grow_with_the_dial() -> None:
    knobs = Knobs(DIAL, 0.0)

    knobs.turn("detector", 870.0)
    assert knobs.seen(3e5) == pytest.approx(0.5 * (1 - 130 * 4e-5))

    knobs.turn("detector", 1070.0)
    assert knobs.seen(3e5) == pytest.approx(1 + 70 * 4e-5)
    assert knobs.darker() == pytest.approx(2.718281828)


def test_a_rate_that_sags_takes_off_what_is_set() -> None:
    knobs = Knobs(DIAL.model_copy(update={"sag": 1e-4}), 0.0)

    knobs.turn("detector", 900.0)

    assert knobs.seen(3e5) < 0.6 < 0.95 < knobs.seen(3e3)


def test_attenuators_and_the_light_of_the_room_stay_as_they_were_turned() -> None:
    knobs = Knobs(DIAL, 4e3)

    knobs.turn("attenuator", 0.25)
    knobs.turn("room light", 1.0)

    assert (knobs.passed, knobs.room_hz) == (0.25, 4e3)
