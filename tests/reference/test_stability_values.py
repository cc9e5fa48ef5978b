"""Stability and control charts: published series and run lengths."""

from __future__ import annotations

import numpy as np
import pytest

from daq.estimate import (
    allan_deviation,
    cusum,
    cusum_run_length,
    ewma,
    ewma_run_length,
    jackknife,
)

# "Handbook of Frequency Stability Analysis", NIST SP 1065 (2008), test suites of pp. 107 and 108.
NINE_POINTS = [892, 809, 823, 798, 671, 644, 883, 903, 677]


def thousand_points() -> list[float]:
    """Return n(i+1) = 16807 n(i) mod 2147483647 from 1234567890, divided by the modulus."""
    number, series = 1234567890, []
    for _ in range(1000):
        series.append(number / 2147483647)
        number = 16807 * number % 2147483647
    return series


def test_nine_points() -> None:
    """NIST SP 1065, p. 107: 91.22945, 115.8082; overlapping 85.95287."""
    found = [
        allan_deviation(NINE_POINTS, m, overlapping) for m, overlapping in [(1, False), (2, False), (2, True)]
    ]

    assert found == pytest.approx([91.22945, 115.8082, 85.95287], rel=1e-7)


@pytest.mark.parametrize(
    ("overlapping", "expected"),
    [(False, [0.2922319, 0.09965736, 0.03897804]), (True, [0.2922319, 0.09159953, 0.03241343])],
)
def test_a_thousand_points(overlapping: bool, expected: list[float]) -> None:
    """NIST SP 1065, p. 108, averaging factors 1, 10, 100; seven digits printed."""
    series = thousand_points()

    found = [allan_deviation(series, m, overlapping) for m in (1, 10, 100)]

    assert np.mean(series) == pytest.approx(0.4897744629, abs=5e-11)
    assert found == pytest.approx(expected, rel=2e-7)


def test_a_steady_poisson_source_has_the_allan_variance_of_its_counting() -> None:
    """By definition: rate/gate time. A ratio of 20 000 differences has a standard error of 1.2 %; three."""
    rate = np.random.default_rng(13).poisson(400.0, 20_000) / 2.0

    ratio = allan_deviation(rate, 1) ** 2 / (rate.mean() / 2.0)

    assert ratio == pytest.approx(1.0, abs=3 * 0.0123)


def test_the_ewma_example_of_the_handbook() -> None:
    """NIST/SEMATECH e-Handbook, 6.3.2.4; data and results from memory, recomputed to all digits."""
    data = [52.0, 47.0, 53.0, 49.3, 50.1, 47.0, 51.0, 50.1, 51.2, 50.5]
    data += [49.6, 47.6, 49.9, 51.3, 47.8, 51.2, 52.6, 52.4, 53.6, 52.1]
    expected = [50.6, 49.52, 50.56, 50.18, 50.16, 49.21, 49.75, 49.85, 50.26, 50.33]
    expected += [50.11, 49.36, 49.52, 50.05, 49.38, 49.92, 50.73, 51.23, 51.94, 51.99]

    chart = ewma(data, 50.0, 2.0539, 0.3, 3.0)

    assert chart.average == pytest.approx(expected, abs=0.0051)
    assert (chart.lower, chart.upper) == pytest.approx((47.4115, 52.5884), abs=5e-4)
    assert chart.alarms.size == 0


def test_the_cusum_example_of_the_handbook() -> None:
    """NIST/SEMATECH e-Handbook, 6.3.2.3, target 325; from memory, recomputed; first alarm at group 14."""
    data = [324.925, 324.675, 324.725, 324.350, 325.350, 325.225, 324.125, 324.525, 325.225, 324.600]
    data += [324.625, 325.150, 328.325, 327.250, 327.825, 328.500, 326.675, 327.775, 326.875, 328.350]
    low = [0, 0.0075, 0, 0.3325, 0, 0, 0.5575, 0.715, 0.1725, 0.255, 0.3125, *[0] * 9]
    high = [0, 0, 0, 0, 0.0325, *[0] * 7, 3.0075, 4.94, 7.4475, 10.63, 11.9875, 14.445, 16.0025, 19.035]

    chart = cusum(data, 325.0, 0.3175, 4.1959)

    assert chart.high == pytest.approx(high, abs=0.005)
    assert chart.low == pytest.approx(low, abs=0.005)
    assert chart.alarms[0] + 1 == 14


@pytest.mark.parametrize(
    ("shift", "expected"),
    [
        (0, 465.44),
        (0.25, 139.49),
        (0.5, 38.0),
        (0.75, 17.05),
        (1, 10.38),
        (1.5, 5.75),
        (2, 4.01),
        (3, 2.57),
        (4, 2.01),
    ],
)
def test_run_lengths_of_the_usual_cusum(shift: float, expected: float) -> None:
    """From "Introduction to Statistical Quality Control", CUSUM table for k = 0.5, h = 5.

    Published digits (465, 139, 38.0, 17.0, 10.4, 5.75, 4.01, 2.57, 2.01) from memory, recomputed.
    """
    assert cusum_run_length(0.5, 5.0, shift) == pytest.approx(expected, rel=0.005)


@pytest.mark.parametrize(
    ("h", "expected"), [(4.0, 167.68204989855863), (9.064, 27493.82034407132), (11.057, 201770.48564566587)]
)
def test_run_lengths_of_longer_cusums(h: float, expected: float) -> None:
    """Derived by a Markov chain; 1 %."""
    assert cusum_run_length(0.5, h, 0.0) == pytest.approx(expected, rel=0.01)


@pytest.mark.parametrize(
    ("k", "h", "expected"),
    [
        (0.25, 8.01, 370.3),
        (0.5, 4.77, 368.6),
        (0.75, 3.34, 370.6),
        (1.0, 2.52, 372.8),
        (1.25, 1.99, 373.5),
        (1.5, 1.61, 376.3),
    ],
)
def test_limits_for_a_false_alarm_in_370(k: float, h: float, expected: float) -> None:
    """From "Cumulative sum control charting: an underutilized SPC tool", J. Qual. Technol. 25, 463 (1993).

    h for 370 at two decimals, from memory; the run length at that h recomputed to four digits.
    """
    found = cusum_run_length(k, h, 0.0)

    assert found == pytest.approx(370, rel=0.02)
    assert found == pytest.approx(expected, abs=0.06)


@pytest.mark.parametrize(
    ("weight", "limit", "expected"),
    [
        (0.40, 3.054, [499.95, 71.20, 14.26, 3.52, 2.02]),
        (0.25, 2.998, [499.84, 48.29, 11.14, 3.61, 2.26]),
        (0.20, 2.962, [499.74, 41.76, 10.54, 3.74, 2.38]),
    ],
)
def test_run_lengths_of_ewmas(weight: float, limit: float, expected: list[float]) -> None:
    """From "Exponentially weighted moving average control schemes", Technometrics 32, 1 (1990).

    Published 500, 71.2, 14.3, 3.5, 2.0; 500, 48.2, 11.1, 3.6, 2.3; 500, 41.8, 10.5, 3.7, 2.4 at shifts 0,
    0.5, 1, 2, 3; from memory, recomputed to the digits here.
    """
    found = [ewma_run_length(weight, limit, shift) for shift in (0, 0.5, 1, 2, 3)]

    assert found == pytest.approx(expected, abs=0.0051)


@pytest.mark.parametrize(
    ("weight", "limit", "expected"),
    [(0.1, 2.814, 499.3853797937826), (0.25, 3.0, 502.8129790666829), (0.05, 3.905, 27454.622582153286)],
)
def test_run_lengths_of_slower_ewmas(weight: float, limit: float, expected: float) -> None:
    """Derived by a Markov chain; 1 %."""
    assert ewma_run_length(weight, limit, 0.0) == pytest.approx(expected, rel=0.01)


def test_an_ewma_of_the_newest_value_alone_is_a_three_sigma_chart() -> None:
    """Common practice: 1/(2 Phi(-3)) = 370.398; 43.895 at a shift of one standard deviation."""
    assert ewma_run_length(1.0, 3.0, 0.0) == pytest.approx(370.398, abs=1e-3)
    assert ewma_run_length(1.0, 3.0, 1.0) == pytest.approx(43.895, abs=1e-3)


def test_the_jackknife_of_five_blocks() -> None:
    """Derived: blocks 1, 2, 4, 5, 8; standard error of the mean."""
    blocks = np.array([1.0, 2.0, 4.0, 5.0, 8.0])

    se, dof = jackknife((blocks.sum() - blocks) / 4)

    assert se == pytest.approx(1.224744871391589, rel=1e-12)
    assert dof == 4
