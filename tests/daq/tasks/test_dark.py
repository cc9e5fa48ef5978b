"""Dark: what is counted without light, and when light past the mask is seen."""

from __future__ import annotations

import numpy as np
import pytest

from daq.tasks.dark import CLOSED, DARK, LIT, NIGHT, TASK, decision_and_limit
from tests.daq.tasks.made import drawn, setting
from tests.examples import lantern_rig

RATES_HZ = {CLOSED: 800.0, DARK: 50.0, NIGHT: 800.0, LIT: 900.0}


def test_dark_and_leak_come_out_as_they_were_put_in() -> None:
    known = setting(shutter=True)
    asks = TASK.asks(known, ())

    found = TASK.fit(known, drawn(asks, lambda ask: RATES_HZ[ask.role], np.random.default_rng(1)))

    assert found.verdict == "pass"
    for name, truth in (("closed_hz", 800.0), ("dark_hz", 50.0), ("leak_hz", 750.0), ("room_hz", 100.0)):
        assert abs(found.values[name] - truth) < 4 * found.se[name]


def test_without_a_shutter_dark_and_leak_are_not_told_apart() -> None:
    known = setting()
    asks = TASK.asks(known, ())

    found = TASK.fit(known, drawn(asks, lambda ask: 800.0, np.random.default_rng(1)))

    assert {ask.role for ask in asks} == {CLOSED, NIGHT, LIT}
    assert (found.values["dark_hz"], found.values["leak_hz"]) == (None, None)
    assert "no shutter" in found.sentence


def test_light_in_one_place_makes_it_doubtful() -> None:
    known = setting()
    asks = TASK.asks(known, ())
    brightest = max(ask.position_mm for ask in asks)

    found = TASK.fit(
        known,
        drawn(asks, lambda ask: 900.0 if ask.position_mm == brightest else 800.0, np.random.default_rng(1)),
    )

    assert found.verdict == "doubtful"
    assert "look for light" in found.sentence


def test_a_leak_above_the_threshold_is_found_as_often_as_the_limits_say() -> None:
    random, dark_hz, time_s = np.random.default_rng(2), 50.0, 500.0
    decision_hz, limit_hz = decision_and_limit(dark_hz, time_s, time_s)

    def over(leak_hz: float) -> float:
        gross = random.poisson((dark_hz + leak_hz) * time_s, 20_000) / time_s
        return float(np.mean(gross - random.poisson(dark_hz * time_s, 20_000) / time_s > decision_hz))

    bar = 4 * np.sqrt(0.05 * 0.95 / 20_000)
    assert over(0.0) == pytest.approx(0.05, abs=bar)
    assert over(limit_hz) == pytest.approx(0.95, abs=bar)


def test_the_room_is_lit_by_a_person_with_a_caution_and_dark_again_in_the_end() -> None:
    turns = [ask.turn for ask in TASK.asks(setting(), ()) if ask.turn is not None]

    assert [turn.value for turn in turns] == [0.0, 1.0, 0.0, 1.0, 0.0]
    assert "CAUTION: room light" in turns[0].caution
    assert not any(turn.caution for turn in turns[1:])


def test_a_light_that_adds_nothing_is_said_to_add_nothing_that_is_seen() -> None:
    known = setting()

    found = TASK.fit(known, drawn(TASK.asks(known, ()), lambda ask: 800.0, np.random.default_rng(1)))

    assert "which is not seen" in found.sentence


def test_without_a_light_to_switch_nobody_is_asked_to() -> None:
    dark = lantern_rig(by_hand={})

    assert {ask.role for ask in TASK.asks(setting(rig=dark), ())} == {CLOSED}
