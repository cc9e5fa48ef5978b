"""Plateau: knee, slope and a gain that depends on the rate, from readings of a known detector."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.special import ndtr

from daq.errors import DaqError
from daq.tasks.contract import Ask, Outcome
from daq.tasks.plateau import TASK
from tests.daq.tasks.made import drawn, setting
from tests.examples import lantern_rig

KNOWN = setting()
KNEE, BLUR = 870.0, 15.0
# where the rate has fallen by 1 % below the plateau: 870 + 2.326 * 15 (upper 1 % point of the normal law)
BEGINS = 904.9


def measured(seed: int, slope: float = 4e-5, dim_slope: float | None = None, knee: float = KNEE) -> Outcome:
    """Return the outcome for a detector with a blurred knee and a slope above it, by role."""
    stands = 0.0

    def rate_hz(ask: Ask) -> float:
        nonlocal stands
        stands = stands if ask.turn is None else ask.turn.value
        role = ask.role.split()[0]
        if role == "dark":
            return float(50.0 * np.exp((stands - 1000) / 70))
        rise = slope if role == "bright" or dim_slope is None else dim_slope
        light = {"bright": 3e5, "dim": 3e4}[role]
        return float(light * ndtr((stands - knee) / BLUR) * (1 + rise * (stands - 1000)) + 50.0)

    return TASK.fit(KNOWN, drawn(TASK.asks(KNOWN, ()), rate_hz, np.random.default_rng(seed)))


def test_slope_and_knee_come_out_as_they_were_put_in() -> None:
    found = measured(1)

    assert found.verdict == "pass"
    assert abs(found.values["slope"] - 4e-5) < 4 * found.se["slope"]
    assert found.values["begins"] == pytest.approx(BEGINS, abs=12.5)  # half a step of the settings
    assert BEGINS < found.values["choose"] < BEGINS + (1100 - BEGINS) / 2


def test_the_slope_scatters_as_it_says() -> None:
    found = [measured(seed) for seed in range(60)]

    pulls = np.array([(one.values["slope"] - 4e-5) / one.se["slope"] for one in found])
    assert abs(pulls.mean()) < 4 / np.sqrt(60) + 0.1  # ln(1 + s v) bends a little
    assert pulls.std(ddof=1) < 1 + 4 / np.sqrt(2 * 60)


def test_a_detector_on_the_slope_below_its_plateau_fails() -> None:
    found = measured(3, knee=990.0)

    assert found.verdict == "fail"
    assert "1000 V stands on the slope below it" in found.sentence


def test_a_rate_that_goes_on_rising_is_no_plateau() -> None:
    found = measured(4, slope=2e-3)

    assert found.verdict == "fail"
    assert "No plateau is seen" in found.sentence


def test_a_gain_that_depends_on_the_rate_is_doubtful() -> None:
    found = measured(5, slope=4e-4, dim_slope=0.0)

    assert found.verdict == "doubtful"
    assert "the gain depends on the rate" in found.sentence


def test_a_person_is_cautioned_of_high_voltage_once_and_leaves_the_dial_where_it_was() -> None:
    turns = [ask.turn for ask in TASK.asks(KNOWN, ()) if ask.turn is not None]

    assert [turn.caution[:22] for turn in turns if turn.caution] == ["CAUTION: high voltage "]
    assert turns[0].caution
    assert turns[-1].value == 1000.0
    assert min(turn.value for turn in turns) == 850.0
    assert max(turn.value for turn in turns) == 1100.0


def test_without_a_dial_the_task_says_what_it_lacks() -> None:
    assert "by_hand.detector" in " ".join(TASK.lacks(setting(rig=lantern_rig(by_hand={}))))


def test_what_the_instrument_shows_is_what_counts() -> None:
    asks = [
        ask if ask.turn is None else replace(ask, turn=replace(ask.turn, shown=ask.turn.value + 7))
        for ask in TASK.asks(KNOWN, ())
    ]

    def rate_hz(ask: Ask) -> float:
        return 50.0 if ask.role.startswith("dark") else 1e4

    found = TASK.fit(KNOWN, drawn(asks, rate_hz, np.random.default_rng(6)))

    assert found.values["settings"][:2] == [1007.0, 857.0]


def test_without_light_nothing_is_fitted() -> None:
    with pytest.raises(DaqError, match="no more is counted with light than without"):
        TASK.fit(KNOWN, drawn(TASK.asks(KNOWN, ()), lambda ask: 800.0, np.random.default_rng(7)))
