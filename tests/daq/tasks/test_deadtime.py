"""Deadtime: found from sums and from gaps, with the errors that they say; a sagging gain is seen."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from daq.errors import DaqError
from daq.estimate import dead_time_two_source_s, seen_rate_hz
from daq.tasks.contract import Ask
from daq.tasks.deadtime import TASK, crossings_mm, dead_time_of_gaps, dead_time_of_sums
from tests.daq.tasks.made import drawn, setting
from tests.examples import lantern_rig

TAU_S = 40e-9


def crossing_rates(alone_hz: float = 1e6, scale: float = 0.0, far: float = 0.8) -> np.ndarray:
    """Return rates of none, A, B, AB at the four crossings, a scale off by so many radians a quarter."""
    rows = []
    for light, turns in ((alone_hz, 1), (alone_hz, 1), (far * alone_hz, 3), (far * alone_hz, 3)):
        cross = 2 * light * np.cos(turns * (np.pi / 2 + scale))
        rows.append([800.0, light + 800, light + 800, 2 * light + cross + 800])
    return np.array(rows)


@pytest.mark.parametrize("kind", ["non-paralysable", "paralysable"])
@pytest.mark.parametrize("tau_s", [0.0, 5e-9, TAU_S])
def test_the_dead_time_that_was_put_in_comes_out(kind: str, tau_s: float) -> None:
    assert dead_time_of_sums(seen_rate_hz(crossing_rates(), tau_s, kind), kind) == pytest.approx(
        tau_s, abs=1e-15
    )


def test_one_crossing_alone_gives_what_the_two_source_formula_gives() -> None:
    seen = seen_rate_hz(crossing_rates(far=1.0), TAU_S, "non-paralysable")
    none, first, second, both = seen[0]

    assert dead_time_of_sums(seen, "non-paralysable") == pytest.approx(
        dead_time_two_source_s(first, second, both, none), rel=1e-6
    )


def test_a_wrong_scale_of_a_thousandth_moves_it_by_a_thousandth_of_what_it_would_move_one_crossing() -> None:
    wrong = seen_rate_hz(crossing_rates(40e3, 1e-3), TAU_S, "non-paralysable")

    one_crossing = dead_time_two_source_s(wrong[0, 1], wrong[0, 2], wrong[0, 3], wrong[0, 0])

    assert abs(dead_time_of_sums(wrong, "non-paralysable") - TAU_S) < 1e-3 * abs(one_crossing - TAU_S)


def _gate(light: dict[str, float]) -> Callable[[Ask], float]:
    crossings = crossings_mm(lantern_rig())
    table = seen_rate_hz(crossing_rates(**light), TAU_S, "non-paralysable")
    return lambda ask: float(table[crossings.index(ask.position_mm), ask.opening])


def test_its_error_is_the_scatter_of_repeats() -> None:
    known, random = setting(), np.random.default_rng(5)
    asks = TASK.asks(known, ())
    rate = _gate({})

    found = [TASK.fit(known, drawn(asks, rate, random)) for _ in range(60)]

    values = np.array([one.values["dead_time_s"] for one in found])
    said = np.sqrt(np.mean([one.se["dead_time_s"] ** 2 for one in found]))
    assert abs(values.mean() - TAU_S) < 4 * said / np.sqrt(60)
    assert values.std(ddof=1) == pytest.approx(said, rel=4 / np.sqrt(2 * 60))


def arrivals(rate_hz: float, seconds: float, tau_s: float, random: np.random.Generator) -> np.ndarray:
    """Return the gaps between the counts of a non-paralysable counter: an arrival after each dead time."""
    return tau_s + random.exponential(1 / rate_hz, int(rate_hz * seconds))


def test_gaps_give_the_dead_time_and_its_error() -> None:
    random = np.random.default_rng(6)

    found = np.array([dead_time_of_gaps(arrivals(1e5, 0.2, TAU_S, random)) for _ in range(2000)])

    said = found[:, 1].mean()
    assert abs(found[:, 0].mean() - TAU_S) < 4 * said / np.sqrt(2000)
    assert found[:, 0].std() == pytest.approx(said, rel=0.1)  # 2000 draws of an exponential law: 3.2 %


def test_a_gain_that_sags_by_a_hundredth_at_the_top_is_seen_because_gaps_and_sums_disagree() -> None:
    random, sag = np.random.default_rng(7), 0.01
    true = crossing_rates()
    seen = seen_rate_hz(true, TAU_S, "non-paralysable")
    sagged = seen * (1 - sag * seen / seen.max())
    live_s = 640.0
    by_sums = [
        dead_time_of_sums(random.poisson(sagged * live_s) / live_s, "non-paralysable") for _ in range(20)
    ]
    by_gaps, gap_se = dead_time_of_gaps(arrivals(1e6, 0.2, TAU_S, random))

    apart = np.mean(by_sums) - by_gaps

    assert apart > 3 * np.hypot(np.std(by_sums, ddof=1), gap_se)


def test_counts_that_no_dead_time_explains_are_refused_with_a_sentence() -> None:
    rates = crossing_rates(40e3)
    rates[:, 3] *= 2

    with pytest.raises(DaqError, match=r"does not converge.*then repeat"):
        dead_time_of_sums(rates, "non-paralysable")
