from __future__ import annotations

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import poisson

from daq.estimate import dead_time_two_source_s, poisson_interval, seen_rate_hz, true_rate_hz
from daq.estimate.arrays import FloatArray
from daq.estimate.counting import scatter, true_counts, within_range

KINDS = ["non-paralysable", "paralysable"]


@given(st.sampled_from(KINDS), st.floats(1e-3, 1e7), st.floats(1e-9, 1e-3))
def test_the_true_rate_is_found_again_below_saturation(kind: str, true_hz: float, dead_time_s: float) -> None:
    true_hz = min(true_hz, 0.9 / dead_time_s)  # a paralysable counter shows two rates the same: the lower one

    found = true_rate_hz(seen_rate_hz(true_hz, dead_time_s, kind), dead_time_s, kind)

    assert found == pytest.approx(true_hz, rel=1e-10)


@pytest.mark.parametrize("kind", KINDS)
def test_without_dead_time_every_count_is_seen(kind: str) -> None:
    assert true_rate_hz(seen_rate_hz(5e6, 0.0, kind), 0.0, kind) == 5e6


@pytest.mark.parametrize(("kind", "most_hz"), [("non-paralysable", 1e6), ("paralysable", 1e6 / math.e)])
def test_a_rate_above_saturation_is_refused(kind: str, most_hz: float) -> None:
    assert within_range(most_hz * 0.999, 1e-6, kind)
    with pytest.raises(ValueError, match=f"is out of range for a {kind} dead time of 1e-06 s"):
        true_rate_hz(np.array([10.0, most_hz * 1.001]), 1e-6, kind)


def test_a_negative_dead_time_is_refused() -> None:
    with pytest.raises(ValueError, match="must not be below zero, not -1e-06 s"):
        true_rate_hz(1.0, -1e-6, "paralysable")


def test_an_unknown_kind_of_dead_time_is_refused() -> None:
    with pytest.raises(ValueError, match="one of non-paralysable, paralysable, not 'hybrid'"):
        seen_rate_hz(1.0, 1e-6, "hybrid")


@given(st.sampled_from(KINDS), st.floats(1e2, 1e5), st.floats(1e-8, 1e-6))
def test_the_correction_scales_a_given_variance_by_its_slope(
    kind: str, true_hz: float, dead_time_s: float
) -> None:
    live = np.array([2.0])
    counts = np.array([seen_rate_hz(true_hz, dead_time_s, kind)]) * live

    _, variance = true_counts(counts, live, np.array([4.0]), dead_time_s, kind)

    step = 1e-4 * counts
    up, down = (
        true_counts(counts + sense * step, live, np.array([4.0]), dead_time_s, kind)[0] for sense in (1, -1)
    )
    assert variance[0] == pytest.approx(4.0 * ((up - down) / (2 * step))[0] ** 2, rel=1e-6)


def renewal_counts(kind: str, x: float, runs: int, live: float, generator: np.random.Generator) -> FloatArray:
    """Return recorded counts of Poisson arrivals at rate x behind a dead time of 1."""
    counts = np.empty(runs)
    for run in range(runs):
        arrivals = np.cumsum(generator.exponential(1 / x, int(live * x * 1.2) + 100))
        arrivals = arrivals[arrivals < live]
        if kind == "paralysable":
            counts[run] = np.sum(np.diff(arrivals, prepend=-np.inf) > 1)
        else:
            counts[run] = _non_paralysable(arrivals)
    return counts


def _non_paralysable(arrivals: FloatArray) -> int:
    number, free = 0, -np.inf
    for arrival in arrivals.tolist():
        if arrival >= free:
            number, free = number + 1, arrival + 1
    return number


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("x", [0.1, 0.3])
def test_corrected_counts_scatter_as_the_variance_says(kind: str, x: float) -> None:
    runs, live = 1500, 2000.0
    counts = renewal_counts(kind, x, runs, live, np.random.default_rng(5))

    corrected, variance = true_counts(counts, np.full(runs, live), np.full(runs, np.nan), 1.0, kind)

    # The variance of 1500 runs has a relative standard error of sqrt(2/1500) = 3.7 %: four of them.
    assert corrected.var(ddof=1) == pytest.approx(variance.mean(), rel=0.146)
    assert corrected.mean() == pytest.approx(x * live, abs=5 * np.sqrt(variance.mean() / runs) + 1.0)


@given(st.floats(1e3, 1e5), st.floats(1e3, 1e5), st.floats(0, 100), st.floats(1e-8, 1e-6))
def test_two_sources_give_the_dead_time_back(first: float, second: float, dark: float, dead: float) -> None:
    rates = (first + dark, second + dark, first + second + dark, dark)
    seen = [seen_rate_hz(rate, dead, "non-paralysable") for rate in rates]

    found = dead_time_two_source_s(*seen)

    assert found == pytest.approx(
        dead, rel=1e-4
    )  # rounding: the losses themselves are 1e-5 of a rate at least


@pytest.mark.parametrize("both_hz", [10.0, 100.0])
def test_two_sources_that_give_less_together_than_alone_are_refused(both_hz: float) -> None:
    with pytest.raises(ValueError, match="fit no dead time"):
        dead_time_two_source_s(100.0, 100.0, both_hz, 0.0)


def test_two_sources_without_counts_are_refused() -> None:
    with pytest.raises(ValueError, match="fit no dead time"):
        dead_time_two_source_s(0.0, 0.0, 0.0, 0.0)


@given(st.integers(0, 10_000), st.floats(0.5, 0.999))
def test_the_limits_of_a_poisson_mean_leave_equal_tails(counts: int, confidence: float) -> None:
    low, high = poisson_interval(counts, confidence)

    tail = (1 - confidence) / 2
    assert poisson.cdf(counts, high) == pytest.approx(tail, rel=1e-6)
    assert low == 0 if counts == 0 else poisson.sf(counts - 1, low) == pytest.approx(tail, rel=1e-6)


@pytest.mark.parametrize(("counts", "confidence"), [(-1, 0.95), (1.5, 0.95), (3, 1.0)])
def test_limits_of_nonsense_are_refused(counts: int, confidence: float) -> None:
    with pytest.raises(ValueError, match="must"):
        poisson_interval(counts, confidence)


def test_counts_without_their_accidental_part_scatter_as_all_that_was_counted() -> None:
    value, variance = np.array([100.0, 300.0]), np.array([250.0, 750.0])

    assert scatter(value, variance, 1.5, heralded=True) == 2.5
    assert scatter(value, variance, 1.5, heralded=False) == 1.5
    assert scatter(value * 0, variance, 1.5, heralded=True) == 1.5
