"""A change of level is found soon after it began, and a step is told from a slope."""

import numpy as np
import pytest

from daq.estimate.charts import cusum_run_length
from daq.estimate.shift import AFTER, REFERENCE, K, ShiftChart, told_apart

SIGMA = 1 / np.sqrt(6e5)  # a stand of 6e5 counts
STAND_H = 22 / 3600


def fed(levels):
    chart, told = ShiftChart(), []
    for number, level in enumerate(levels):
        if chart.add(float(level), SIGMA**2, number * STAND_H):
            told.append((number, chart.last))
    return told


def test_a_steady_source_makes_no_news_in_a_night():
    noise = np.random.default_rng(1).normal(0, SIGMA, 1600)

    assert fed(1 + noise) == []


def test_that_the_level_is_learnt_costs_no_false_alarms():
    due = np.tile([2e3, 2e4, 6e3], 150_000)  # stands of a fringe: dark and bright ones
    counts = np.random.default_rng(5).poisson(due)
    chart, alarms = ShiftChart(h=6.0), 0

    for number, (one, expected) in enumerate(zip(counts.tolist(), due.tolist(), strict=True)):
        alarms += chart.add(one / expected, one / expected**2, number * STAND_H)

    # Four standard errors of so many alarms; against the first twenty stands alone it is two thirds of that.
    interval = cusum_run_length(K, 6.0, 0.0) + REFERENCE + AFTER
    assert len(due) / alarms == pytest.approx(interval, rel=4 / np.sqrt(alarms))
    assert alarms > 250


@pytest.mark.parametrize("size", [-0.02, 0.005])
def test_a_step_is_told_with_its_size_and_its_moment(size):
    levels = 1 + np.random.default_rng(2).normal(0, SIGMA, 200)
    levels[100:] += size

    (number, shift), *_ = fed(levels)

    # Ten stands after the alarm; the alarm comes within h / (shift - k) stands and a few of the scatter.
    assert 100 + AFTER <= number <= 100 + AFTER + 8
    assert shift.sudden
    assert shift.size == pytest.approx(size, abs=4 * SIGMA * np.sqrt(1 / 20 + 1 / 10))
    assert shift.hours == pytest.approx(100 * STAND_H, abs=2 * STAND_H)


def test_a_slope_is_told_as_slow():
    levels = 1 + np.random.default_rng(3).normal(0, SIGMA, 200)
    levels[50:] -= 0.03 * STAND_H * np.arange(150)

    _, shift = fed(levels)[0]

    assert not shift.sudden
    assert shift.size < 0


def test_a_source_that_walks_is_not_taken_for_steps():
    random = np.random.default_rng(4)
    walks = 1 + np.cumsum(random.normal(0, 3 * SIGMA, (40, 400)), axis=1) + random.normal(0, SIGMA, (40, 400))

    told = [shift for levels in walks for _, shift in fed(levels)]

    # With the chi-squared of the two models alone about half of them would be "sudden".
    assert len(told) > 400
    assert sum(shift.sudden for shift in told) < 0.1 * len(told)


def test_a_step_without_noise_is_exact():
    levels = [1.0] * 20 + [0.9] * 10

    shift = told_apart(levels, [1e-6] * 30, [0.1 * n for n in range(30)])

    assert (shift.sudden, shift.hours) == (True, 2.0)
    assert shift.size == pytest.approx(-0.1)


def test_a_slope_without_noise_is_exact():
    hours = [0.1 * n for n in range(40)]

    shift = told_apart([1.0 - 0.05 * max(0.0, hour - 2.0) for hour in hours], [1e-6] * 40, hours)

    assert not shift.sudden
    assert shift.hours == pytest.approx(2.0)
    assert shift.size == pytest.approx(-0.05 * (hours[-1] - 2.0))


def test_a_power_reading_without_a_variance_is_left_out():
    chart = ShiftChart()

    assert not any(chart.add(1.0 + number, 0.0, number) for number in range(100))
