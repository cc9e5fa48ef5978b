"""Source: a drift that depends on time and seed alone."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from simulators.source import BLOCK, GRID_S, Factor, RandomWalk, linear, mean_relative, relative

HOUR_S = 3600.0


def test_a_linear_drift_has_lost_its_share_after_ten_hours() -> None:
    assert relative([linear(-0.03)], np.array([0.0, 10 * HOUR_S])) == pytest.approx([1.0, 0.7])


def test_a_source_that_has_run_dry_stays_at_zero() -> None:
    assert relative([linear(-0.5)], np.array([3 * HOUR_S, 30 * HOUR_S])).tolist() == [0.0, 0.0]


def test_drifts_of_several_kinds_multiply() -> None:
    time_s = np.array([HOUR_S])

    both = relative([linear(-0.03), RandomWalk(0.01, 5)], time_s)

    assert both == pytest.approx(0.97 * RandomWalk(0.01, 5)(time_s))


@settings(max_examples=20, deadline=None)
@given(times_s=st.lists(st.floats(0, 20_000), min_size=2, max_size=6))
def test_a_random_walk_does_not_depend_on_the_order_of_asking(times_s: list[float]) -> None:
    forwards, backwards = RandomWalk(0.01, 3), RandomWalk(0.01, 3)

    first = [float(forwards(np.array(time_s))) for time_s in sorted(times_s)]
    second = [float(backwards(np.array(time_s))) for time_s in sorted(times_s, reverse=True)]

    assert first == second[::-1]


def test_a_random_walk_is_the_same_on_both_sides_of_a_block() -> None:
    edge_s = BLOCK * GRID_S
    asked_late = RandomWalk(0.01, 3)

    around = asked_late(np.array([edge_s - GRID_S, edge_s, edge_s + GRID_S]))

    assert around[1] == RandomWalk(0.01, 3)(np.array(edge_s))
    assert len(set(around.tolist())) == 3


def test_another_seed_walks_elsewhere() -> None:
    time_s = np.array([HOUR_S])

    assert RandomWalk(0.01, 1)(time_s) != RandomWalk(0.01, 2)(time_s)


def test_the_walk_spreads_by_its_share_per_square_root_of_an_hour() -> None:
    lag_s, lags = 10.0, 14_400
    walk = np.log(RandomWalk(0.02, 11)(np.linspace(0.0, lags * lag_s, lags + 1)))

    variance = np.mean(np.diff(walk) ** 2)

    expected = 0.02**2 * lag_s / HOUR_S
    assert abs(variance / expected - 1) < 4 * np.sqrt(2 / lags)  # four standard errors


def test_the_mean_over_a_gate_is_that_of_many_points() -> None:
    factors: list[Factor] = [linear(-0.03), RandomWalk(0.1, 7)]
    start_s, stop_s = 123.456, 131.9

    mean = mean_relative(factors, start_s, stop_s)

    points_s = start_s + (stop_s - start_s) * (np.arange(200_000) + 0.5) / 200_000
    assert mean == pytest.approx(relative(factors, points_s).mean(), rel=1e-6)


def test_a_gate_within_one_step_of_the_grid_has_a_mean_too() -> None:
    assert mean_relative([linear(-0.6)], 100.01, 100.02) == pytest.approx(1 - 0.6 * 100.015 / HOUR_S)
