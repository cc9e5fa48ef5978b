import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from daq.itinerary import Wander, compose, drift_variance, walk, wander_of_structure, wander_variance
from daq.itinerary.compose import pattern_of_itinerary
from tests.examples import lantern, lantern_rig

HOUR_S = 3600.0


def by_pairs_of_visits(weight, start_s, dwell_s, wander, points=200):
    """Return -sum c_v c_w D(t_w - t_v), D averaged over both gates on a fine grid of times."""
    inside = (np.arange(points) + 0.5) / points
    times_s = (start_s[:, None] + dwell_s[:, None] * inside).ravel()
    share = np.repeat(weight / points, points)
    lags_s = np.abs(times_s[:, None] - times_s[None, :])
    return -0.5 * share @ wander.structure(lags_s) @ share


@pytest.mark.parametrize(
    "wander",
    [
        Wander(walk_per_s=2e-3),
        Wander(ramp_per_s2=1e-3),
        Wander(relaxing=((1e-2, 0.7), (3e-2, 40.0))),
        Wander(lines=((0.1, 5.0),)),
        Wander(1e-3, 1e-4, ((1e-2, 3.0),), ((0.05, 11.0),)),
    ],
    ids=["walk", "ramp", "relaxing", "line", "all"],
)
def test_every_part_equals_the_sum_over_pairs_of_visits_with_gates_averaged(wander):
    rng = np.random.default_rng(1)
    dwell_s = rng.uniform(0.2, 3.0, 12)
    start_s = np.cumsum(dwell_s + rng.uniform(0.1, 2.0, 12)) - dwell_s
    weight = rng.normal(size=12)
    weight -= weight.mean()

    variance = wander_variance(weight, start_s, dwell_s, wander)

    # the grid of 200 points a gate leaves an error of the order of one part in 200 squared
    assert variance == pytest.approx(by_pairs_of_visits(weight, start_s, dwell_s, wander), rel=2e-4)


@settings(max_examples=30, deadline=None)
@given(time_s=st.floats(1e-3, 1e6), seed=st.integers(0, 1000))
def test_a_relaxing_part_neither_overflows_nor_goes_negative(time_s, seed):
    rng = np.random.default_rng(seed)
    dwell_s = rng.uniform(0.1, 5.0, 300)
    start_s = np.cumsum(dwell_s + rng.uniform(0.0, 50.0, 300)) - dwell_s
    weight = rng.normal(size=300)

    variance = wander_variance(weight, start_s, dwell_s, Wander(relaxing=((1.0, time_s),)))

    assert np.isfinite(variance)
    assert 0 <= variance <= np.abs(weight).sum() ** 2


def test_a_very_slow_relaxing_part_is_a_random_walk():
    rng = np.random.default_rng(2)
    dwell_s = np.full(50, 2.0)
    start_s = np.cumsum(dwell_s + 0.5) - dwell_s
    weight = rng.normal(size=50)
    weight -= weight.mean()

    slow = wander_variance(weight, start_s, dwell_s, Wander(relaxing=((1e7 / 2, 1e7),)))

    assert slow == pytest.approx(wander_variance(weight, start_s, dwell_s, Wander(walk_per_s=1.0)), rel=1e-4)


def test_a_structure_function_made_of_simple_parts_is_found_again():
    lags_s = np.geomspace(1, 300, 14)
    true = Wander(3e-8, 0.0, ((1e-6, 10.0),))

    found = wander_of_structure(lags_s, true.structure(lags_s))

    assert found.structure(lags_s) == pytest.approx(true.structure(lags_s), rel=0.03)


def simulated_kappas(itinerary, log_level_of, paths, seed):
    """Return kappa of noise-free nights whose source wanders, the rate averaged over ten points a gate."""
    rng = np.random.default_rng(seed)
    pattern = pattern_of_itinerary(itinerary, "pairwise")
    inside = (np.arange(10) + 0.5) / 10
    times_s = (itinerary.start_s[:, None] + itinerary.dwell_s[:, None] * inside).ravel()
    cell = itinerary.position_index * len(itinerary.openings) + itinerary.opening_index
    share = itinerary.dwell_s / np.bincount(cell, itinerary.dwell_s)[cell]
    kappas = np.empty(paths)
    for path in range(paths):
        level = np.exp(log_level_of(rng, times_s)).reshape(-1, 10).mean(axis=1)
        mean = np.bincount(cell, share * level).reshape(itinerary.rates_hz.shape)
        kappas[path] = pattern.kappa_of(itinerary.rates_hz * mean)
    return kappas


def random_walk(per_sqrt_hour):
    def log_level(rng, times_s):
        steps_s = np.diff(times_s, prepend=times_s[0])
        return np.cumsum(rng.normal(0, per_sqrt_hour * np.sqrt(steps_s / HOUR_S)))

    return log_level


@pytest.mark.parametrize("order", ["zigzag", "searched", "cyclic", "random"])
def test_planned_drift_variance_agrees_with_4000_simulated_random_walks(order):
    plan = lantern(itinerary__laps=2, positions__number=5, itinerary__order=order, itinerary__dwell="best")
    itinerary = compose(plan, lantern_rig())

    simulated = simulated_kappas(itinerary, random_walk(0.03), 4000, 20261201).var()

    # four standard errors of a variance from 4000 normal draws: 4 sqrt(2 / 4000) = 8.9 %
    assert simulated == pytest.approx(drift_variance(itinerary, walk(0.03)), rel=4 * np.sqrt(2 / 4000))
