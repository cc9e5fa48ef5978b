"""Detector: counts with the mean, the variance and the distribution that dead time leaves."""

from __future__ import annotations

from typing import TypeAlias

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.special import gammainc
from scipy.stats import chisquare

from simulators.detector import draw_bunched, draw_counts
from simulators.draws import generator

GATES = 4000
Counts: TypeAlias = NDArray[np.int64]


def draw(rate_hz: float, gate_s: float, dead_time_s: float, kind: str) -> Counts:
    """Return the counts of many gates, each from its own generator."""
    return np.array(
        [draw_counts(rate_hz, gate_s, dead_time_s, kind, generator(1, "counter", n)) for n in range(GATES)]
    )


def assert_mean_and_variance(counts: Counts, mean: float, variance: float) -> None:
    """Four standard errors each; that of the variance is sqrt(2/n) of it for a nearly normal count."""
    assert abs(counts.mean() - mean) < 4 * np.sqrt(variance / GATES)
    assert abs(counts.var(ddof=1) / variance - 1) < 4 * np.sqrt(2 / GATES)


def test_without_dead_time_counts_scatter_like_poisson() -> None:
    assert_mean_and_variance(draw(1000.0, 5.0, 0.0, "non-paralysable"), 5000, 5000)


@pytest.mark.parametrize("load", [1e-4, 0.0144, 0.1, 0.3, 1.0])
def test_non_paralysable_counts_have_the_renewal_mean_and_variance(load: float) -> None:
    rate_hz, gate_s = 1e5, 0.05
    arrivals = rate_hz * gate_s

    counts = draw(rate_hz, gate_s, load / rate_hz, "non-paralysable")

    # mean of a delayed renewal process with a live start; variance nT / (1 + x)^3
    mean = arrivals / (1 + load) + load**2 / (2 * (1 + load) ** 2)
    assert_mean_and_variance(counts, mean, arrivals / (1 + load) ** 3)


@pytest.mark.parametrize(("arrivals", "load"), [(3.0, 0.2), (8.0, 1.0), (40.0, 0.05), (40.0, 3.0)])
def test_non_paralysable_counts_of_a_short_gate_have_the_exact_distribution(
    arrivals: float, load: float
) -> None:
    rate_hz, dead_time_s = 1e6, load / 1e6
    gate_s = arrivals / rate_hz

    counts = draw(rate_hz, gate_s, dead_time_s, "non-paralysable")

    # at least k counts: the k-th Poisson arrival comes within the time that k - 1 dead times leave
    most = int(counts.max()) + 2
    live_s = np.maximum(gate_s - np.arange(most) * dead_time_s, 0)
    at_least = np.concatenate([[1.0], gammainc(np.arange(1, most + 1), rate_hz * live_s)])
    expected = GATES * (at_least - np.concatenate([at_least[1:], [0.0]]))
    seen = np.bincount(counts, minlength=most + 1)
    enough = expected > 5
    observed = np.append(seen[enough], seen[~enough].sum())
    wanted = np.append(expected[enough], expected[~enough].sum())
    assert chisquare(observed[wanted > 0], wanted[wanted > 0]).pvalue > 1e-4


@pytest.mark.parametrize("load", [1e-4, 0.0144, 0.1, 0.3, 1.0])
def test_paralysable_counts_have_the_mean_and_variance_of_a_long_gate(load: float) -> None:
    rate_hz, gate_s = 1e5, 0.05

    counts = draw(rate_hz, gate_s, load / rate_hz, "paralysable")

    mean = rate_hz * gate_s * np.exp(-load)
    assert_mean_and_variance(counts, mean, mean * (1 - 2 * load * np.exp(-load)))


def test_paralysable_counts_agree_with_arrivals_one_by_one() -> None:
    rate_hz, gate_s, dead_time_s, random = 1e5, 0.01, 3e-6, np.random.default_rng(4)

    counts = draw(rate_hz, gate_s, dead_time_s, "paralysable")

    singly = np.array([_arrivals(rate_hz, gate_s, dead_time_s, random) for _ in range(GATES)])
    # four standard errors of a difference of two means, and of two variances
    assert abs(counts.mean() - singly.mean()) < 4 * np.sqrt((counts.var() + singly.var()) / GATES)
    assert abs(counts.var() / singly.var() - 1) < 4 * np.sqrt(4 / GATES)


def _arrivals(rate_hz: float, gate_s: float, dead_time_s: float, random: np.random.Generator) -> int:
    times_s = np.sort(random.random(random.poisson(rate_hz * gate_s))) * gate_s
    return int(np.sum(np.diff(times_s, prepend=-np.inf) > dead_time_s))


def test_a_tiny_load_leaves_paralysable_counts_poisson() -> None:
    assert_mean_and_variance(draw(1e5, 0.05, 1e-14, "paralysable"), 5000, 5000)


def test_a_saturated_detector_counts_once_in_a_dead_time() -> None:
    counts = draw(1e8, 1e-5, 1e-6, "non-paralysable")

    assert set(counts) <= {9, 10}


@pytest.mark.parametrize("kind", ["non-paralysable", "paralysable"])
def test_nothing_arrives_and_nothing_is_counted(kind: str) -> None:
    assert set(draw(0.0, 1.0, 1e-6, kind)) == {0}
    assert set(draw(1e-9, 1.0, 1e-6, kind)) == {0}


def test_a_draw_depends_on_seed_use_and_number_alone() -> None:
    wanted = generator(1, "counter", 7).integers(1 << 62)

    assert generator(1, "counter", 7).integers(1 << 62) == wanted
    others = [(2, "counter", 7), (1, "monitor", 7), (1, "counter", 8)]
    assert wanted not in [generator(*other).integers(1 << 62) for other in others]


def test_bunched_counts_have_the_variance_that_was_asked_for() -> None:
    random = np.random.default_rng(1)

    counts = np.array([draw_bunched(1000.0, 3.0, random) for _ in range(4000)])

    assert counts.mean() == pytest.approx(1000, abs=4 * np.sqrt(3000 / 4000))
    assert counts.var() == pytest.approx(3000, rel=4 * np.sqrt(2 / 4000))
    assert draw_bunched(0.0, 3.0, random) == 0
