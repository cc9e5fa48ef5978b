import numpy as np
import pytest

from daq.itinerary import Wander, compose, wander_of_counts
from daq.itinerary.pilot import wander_of
from tests.daq.itinerary.rigs import without_dwell
from tests.examples import lantern, lantern_rig

HOUR_S = 3600.0
RATE_HZ = 1e5


def pilot_counts(seed, walk=0.0, line=(0.0, 1.0), samples=1200):
    """Return the counts of a steady opening, a second each, behind a random walk and a line."""
    rng = np.random.default_rng(seed)
    time_s = np.arange(samples)
    level = np.cumsum(rng.normal(0, walk / HOUR_S**0.5, samples))
    level = level + line[0] * np.sin(2 * np.pi * time_s / line[1] + rng.uniform(0, 6.28))
    return rng.poisson(RATE_HZ * np.exp(level))


@pytest.mark.parametrize("walk", [0.01, 0.03])
def test_a_pilot_of_twenty_minutes_finds_the_random_walk(walk):
    lag_s = np.array([20.0])
    ratios = [
        wander_of_counts(pilot_counts(seed, walk), 1.0)[0].structure(lag_s)[0] / (walk**2 / HOUR_S * 20)
        for seed in range(12)
    ]

    # one pilot tells D(20 s) to about a third; the mean of twelve to a tenth: three standard errors
    assert np.mean(ratios) == pytest.approx(1.0, abs=0.35)


def test_a_quiet_source_is_not_taken_for_one_that_walks():
    walks = [
        (wander_of_counts(pilot_counts(seed), 1.0)[0].structure(np.array([20.0]))[0] / 20 * HOUR_S) ** 0.5
        for seed in range(8)
    ]

    assert max(walks) < 0.006


def test_a_line_is_found_with_period_and_amplitude():
    for seed in range(8):
        _, ripples = wander_of_counts(pilot_counts(seed, 0.01, (2e-3, 47.3)), 1.0)

        (ripple,) = ripples
        # three of its own standard uncertainties; the amplitude carries counting noise of a tenth
        assert abs(ripple.period_s - 47.3) < 3 * ripple.period_u_s
        assert ripple.period_u_s < 1.0
        assert ripple.amplitude == pytest.approx(2e-3, rel=0.35)


def test_lines_are_seldom_found_where_there_are_none():
    false = sum(len(wander_of_counts(pilot_counts(seed, 0.01), 1.0)[1]) for seed in range(60))

    assert false <= 2  # 0.06 expected at a chance of 1e-3 each


def test_the_length_of_a_sample_scales_the_wander():
    counts = pilot_counts(1, 0.03)

    slow, fast = (wander_of_counts(counts, sample_s)[0] for sample_s in (1.0, 0.1))

    lags_s = np.array([3.0, 30.0])
    assert fast.structure(lags_s / 10) == pytest.approx(slow.structure(lags_s))


def test_a_pilot_takes_the_place_of_what_was_expected_and_keeps_its_lines():
    counts = pilot_counts(2, 0.03).tolist()
    measurement = lantern(pilot={"counts": counts}, expect__lines=[{"period_s": 900.0, "amplitude": 1e-3}])

    wander, ripples = wander_of(measurement)

    assert wander.walk_per_s != 0.01**2 / HOUR_S
    assert wander.lines[0] == (1e-3, 900.0)
    assert ripples[0].period_s == 900.0


def test_a_structure_function_is_taken_as_it_is():
    lags_s = [1.0, 3.0, 10.0, 30.0, 100.0]
    walk = Wander(walk_per_s=0.02**2 / HOUR_S)
    structure = walk.structure(np.array(lags_s)).tolist()

    wander, _ = wander_of(lantern(pilot={"lags_s": lags_s, "structure": structure}))

    assert wander.structure(np.array(lags_s)) == pytest.approx(structure, rel=1e-6)


def test_a_source_that_relaxes_is_expected_as_described():
    wander, _ = wander_of(lantern(expect__relaxing=[{"sd": 0.002, "time_s": 60.0}]))

    assert wander.relaxing == ((0.002**2, 60.0),)


def test_the_dwell_comes_from_the_pilot():
    quiet, walking = (
        compose(without_dwell(pilot={"counts": pilot_counts(3, walk).tolist()}), lantern_rig()).dwell_s[0]
        for walk in (0.001, 0.05)
    )

    assert walking < quiet / 2
