"""Crossings: the dead time that was put in comes out, with the error that it says and that of the formula."""

from __future__ import annotations

import numpy as np
import pytest

from daq.errors import DaqError
from daq.estimate import dead_time_two_source_s, seen_rate_hz
from daq.tasks.crossings import dead_time_of_cycles
from tests.daq.tasks.made import crossing_rates, cycles_of, sums_sd_s

TAU_S = 40e-9
ONCE = 2  # cycles that are alike: no scatter, the solution alone


@pytest.mark.parametrize("kind", ["non-paralysable", "paralysable"])
@pytest.mark.parametrize("tau_s", [0.0, 5e-9, TAU_S])
def test_the_dead_time_that_was_put_in_comes_out(kind: str, tau_s: float) -> None:
    seen = seen_rate_hz(crossing_rates(), tau_s, kind)

    assert dead_time_of_cycles(np.array([seen] * ONCE), kind).tau_s == pytest.approx(tau_s, abs=1e-15)


def test_one_crossing_alone_gives_what_the_two_source_formula_gives() -> None:
    seen = seen_rate_hz(crossing_rates(far=1.0), TAU_S, "non-paralysable")
    none, first, second, both = seen[0]

    found = dead_time_of_cycles(np.array([seen] * ONCE), "non-paralysable")

    assert found.tau_s == pytest.approx(dead_time_two_source_s(first, second, both, none), rel=1e-6)


def test_a_wrong_scale_of_a_thousandth_moves_it_by_a_thousandth_of_what_it_would_move_one_crossing() -> None:
    wrong = seen_rate_hz(crossing_rates(40e3, scale=1e-3), TAU_S, "non-paralysable")

    one_crossing = dead_time_two_source_s(wrong[0, 1], wrong[0, 2], wrong[0, 3], wrong[0, 0])
    found = dead_time_of_cycles(np.array([wrong] * ONCE), "non-paralysable")

    assert abs(found.tau_s - TAU_S) < 1e-3 * abs(one_crossing - TAU_S)


@pytest.mark.parametrize(
    ("alone_hz", "live_s", "kind"), [(4e4, 10.0, "non-paralysable"), (1e6, 2.0, "paralysable")]
)
def test_its_error_is_its_scatter_and_that_of_the_formula(alone_hz: float, live_s: float, kind: str) -> None:
    """The study `tasks` has 4000 draws of more cases, for the twentieth that is aimed at."""
    random, draws, number = np.random.default_rng(5), 800, 16
    rates = crossing_rates(alone_hz, background_hz=0.0, far=1.0)

    found = [dead_time_of_cycles(cycles_of(rates, number, live_s, kind, random), kind) for _ in range(draws)]

    values = np.array([one.tau_s for one in found])
    said = float(np.sqrt(np.mean([one.se_s**2 for one in found])))
    known = 4 / np.sqrt(2 * draws)
    assert abs(values.mean() - TAU_S) < 4 * said / np.sqrt(draws)
    assert values.std(ddof=1) == pytest.approx(said, rel=known)
    assert said == pytest.approx(sums_sd_s(alone_hz, number * live_s), rel=0.02 + 2 * alone_hz * TAU_S)


def test_counts_that_no_dead_time_explains_are_refused_with_a_sentence() -> None:
    rates = crossing_rates(40e3)
    rates[:, 3] *= 2

    with pytest.raises(DaqError, match=r"does not converge.*then repeat"):
        dead_time_of_cycles(np.array([rates] * ONCE), "non-paralysable")
