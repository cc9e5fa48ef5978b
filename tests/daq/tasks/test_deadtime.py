"""Deadtime: sums and gaps together, and what is said where they do not agree."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import numpy as np
import pytest

from daq.estimate import seen_rate_hz
from daq.tasks.contract import Ask, Outcome, Setting, Taken
from daq.tasks.crossings import crossings_mm
from daq.tasks.deadtime import GAPS, TASK
from daq.tasks.yardstick import SHARE
from tests.daq.tasks.made import GAP_S, crossing_rates, drawn, gate_ticks, reading, setting
from tests.examples import lantern, lantern_rig

TAU_S, BRIGHT_HZ = 40e-9, 360e3
TICK_S, CHANNELS = 1e-9, 2
LIST_MODE: dict[str, Any] = {
    "devices__counter__driver": "list-mode-counter",
    "devices__counter__stream": "tcp://127.0.0.1:7807",
    "devices__counter__channels": CHANNELS,
}


def _rate(sag: float, alone_hz: float = 1e6) -> Callable[[Ask], float]:
    """Return what the crossings count; a gain that sags takes a share of the counts, at the top rate."""
    crossings = crossings_mm(lantern_rig())
    seen = seen_rate_hz(crossing_rates(alone_hz), TAU_S, "non-paralysable")
    table = seen * (1 - sag * seen / seen.max())
    return lambda ask: float(table[crossings.index(ask.position_mm), ask.opening])


def timed(ask: Ask, random: np.random.Generator) -> Taken:
    """Return a gate whose counts are timed, in two channels of which the second is even faster."""
    number = round(ask.dwell_s * BRIGHT_HZ)
    first = gate_ticks(BRIGHT_HZ, number, TAU_S, TICK_S, random) * CHANNELS
    second = random.integers(0, int(first[-1]), 3 * number) // CHANNELS * CHANNELS + 1
    events = np.sort(np.concatenate([first, second])).astype("<u8").tobytes()
    return ask, reading(ask, (len(first), len(second)), events=events)


def done(sag: float = 0.0, **rig: Any) -> Outcome:
    """Return the outcome on a bench with a dead time of 40 ns."""
    known, random = setting(rig=lantern_rig(**rig)), np.random.default_rng(5)
    return TASK.fit(known, _taken(known, sag, random))


def _taken(known: Setting, sag: float, random: np.random.Generator) -> list[Taken]:
    asks = TASK.asks(known, ())
    gates = [timed(ask, random) for ask in asks if ask.role == GAPS]
    return gates + drawn([ask for ask in asks if ask.role != GAPS], _rate(sag), random)


def test_a_counter_that_times_nothing_is_asked_for_sums_alone() -> None:
    asks = TASK.asks(setting(), ())

    assert not [ask for ask in asks if ask.events]
    assert "by_gaps_s" not in done().values


def test_sums_alone_find_it_within_their_error() -> None:
    found = done()

    assert abs(found.values["dead_time_s"] - TAU_S) < 4 * found.se["dead_time_s"]
    assert found.verdict == "pass"


def test_it_says_how_long_an_error_of_a_twentieth_takes() -> None:
    known, random = setting(), np.random.default_rng(5)
    asks = TASK.asks(known, ())

    found = TASK.fit(known, drawn(asks, _rate(0.0, 1e5), random))

    needed_s = found.values["fine_after_s"]
    took_s = sum(ask.dwell_s + GAP_S for ask in asks) - GAP_S
    tau, se = found.values["dead_time_s"], found.se["dead_time_s"]
    assert se * np.sqrt(took_s / needed_s) == pytest.approx(0.05 * tau)
    assert ("An error of 5 % would take" in found.sentence) == (se > 0.05 * tau)


def test_sums_and_gaps_agree_and_both_are_taken() -> None:
    found = done(**LIST_MODE)

    assert abs(found.values["by_sums_s"] - TAU_S) < 4 * found.se["by_sums_s"]
    assert abs(found.values["dead_time_s"] - TAU_S) < 4 * found.se["dead_time_s"]
    assert found.se["dead_time_s"] == pytest.approx(
        1 / np.hypot(1 / found.se["by_gaps_s"], 1 / found.se["by_sums_s"])
    )
    assert found.verdict == "pass"
    assert "Sums and gaps agree" in found.sentence


def test_a_gain_that_sags_by_a_hundredth_at_the_top_is_said_because_sums_and_gaps_disagree() -> None:
    found = done(sag=0.01, **LIST_MODE)

    assert found.values["apart_in_se"] > 3
    assert found.values["dead_time_s"] == found.values["by_sums_s"]
    assert found.verdict in ("doubtful", "fail")
    assert "Sums and gaps disagree by" in found.sentence
    assert "look at the pulse height" in found.sentence


@pytest.mark.parametrize(("allowed_ns", "verdict"), [(100.0, "doubtful"), (1.0, "fail")])
def test_a_disagreement_that_moves_kappa_more_than_one_defect_may_fails(
    allowed_ns: float, verdict: str
) -> None:
    # a hundredth at 2e6/s is 5 ns; the error of the sums is 0.05 ns
    goal_se = abs(setting().yardstick.per_dead_time) * allowed_ns * 1e-9 / SHARE
    known = setting(lantern(estimate__goal_se=goal_se), lantern_rig(**LIST_MODE))

    assert TASK.fit(known, _taken(known, 0.01, np.random.default_rng(5))).verdict == verdict


def test_gaps_of_another_channel_are_not_looked_at() -> None:
    found = done(**LIST_MODE)

    # the second channel has no dead time at all: its shortest gap is one tick
    assert found.values["by_gaps_s"] > 39e-9
