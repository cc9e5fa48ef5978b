"""Gaps: the dead time that was put in comes out with its error; what follows a count too soon is seen."""

from __future__ import annotations

import numpy as np
import pytest

from daq.errors import DaqError
from daq.tasks.gaps import Gaps, Ticks, dead_time_of_gaps
from tests.daq.tasks.made import gate_ticks

TAU_S = 40e-9


def found_in(
    rate_hz: float, tau_s: float, tick_s: float, random: np.random.Generator, number: int = 20_000
) -> Gaps:
    """Return what two gates of a non-paralysable counter say."""
    ticks = [gate_ticks(rate_hz, number // 2, tau_s, tick_s, random) for _ in range(2)]
    return dead_time_of_gaps(ticks, tick_s)


@pytest.mark.parametrize(("rate_hz", "tick_s"), [(1e5, 1e-9), (1e6, 1e-9), (1e5, 1e-8)])
def test_its_error_is_its_scatter_with_ticks_of_a_nanosecond_and_of_ten(
    rate_hz: float, tick_s: float
) -> None:
    """The study `tasks` has 4000 draws of more cases, for the twentieth that is aimed at."""
    random, draws = np.random.default_rng(6), 400

    found = [found_in(rate_hz, TAU_S + 0.3e-9, tick_s, random) for _ in range(draws)]

    values = np.array([one.tau_s for one in found])
    said = float(np.sqrt(np.mean([one.se_s**2 for one in found])))
    assert abs(values.mean() - TAU_S - 0.3e-9) < 4 * said / np.sqrt(draws)
    assert values.std(ddof=1) == pytest.approx(said, rel=4 / np.sqrt(2 * draws))


def test_with_a_fine_tick_its_error_is_one_over_rate_and_number() -> None:
    """From the law of the smallest of N exponential gaps: mean and standard deviation 1/(n N)."""
    found = found_in(1e5, TAU_S, 1e-13, np.random.default_rng(7))

    assert found.se_s == pytest.approx(1 / (1e5 * 20_000), rel=0.05)


def test_an_even_rate_is_seldom_said_not_to_be_one() -> None:
    random, draws = np.random.default_rng(8), 400

    found = [found_in(1e6, TAU_S, 1e-9, random) for _ in range(draws)]

    chi2, dof = np.array([one.chi2 for one in found]), np.array([one.dof for one in found])
    assert np.mean(chi2 / dof) == pytest.approx(1.0, abs=4 * np.sqrt(2 / dof.mean() / draws))
    assert np.mean([abs(one.soon) > 3 * one.soon_se for one in found]) <= 0.015


def with_afterpulses(ticks: Ticks, share: float, within: float, random: np.random.Generator) -> Ticks:
    """Return counts a share of which are followed by another, beyond the dead time."""
    again = ticks[random.random(len(ticks)) < share]
    later = again + 41 + random.exponential(within, len(again)).astype(np.int64)
    every = np.sort(np.concatenate([ticks, later]))
    return every[np.diff(every, prepend=-100) >= 40]


def test_afterpulses_of_a_hundredth_are_seen_with_their_share() -> None:
    random = np.random.default_rng(9)
    plain = gate_ticks(1e5, 200_000, TAU_S, 1e-9, random)

    found = dead_time_of_gaps([with_afterpulses(plain, 0.01, 100.0, random)], 1e-9)

    assert found.chi2 > 10 * found.dof
    assert found.soon == pytest.approx(0.01, abs=4 * found.soon_se)


def test_a_few_counts_are_refused_with_a_sentence() -> None:
    with pytest.raises(DaqError, match=r"99 gaps between counts are too few.*then repeat"):
        dead_time_of_gaps([np.arange(100) * 1000], 1e-9)
