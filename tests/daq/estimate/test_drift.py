from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from daq.estimate import allan_deviation, structure_function


@pytest.mark.parametrize("overlapping", [False, True])
@given(slope=st.floats(-10, 10), level=st.floats(-100, 100), m=st.integers(1, 10))
def test_a_straight_line_deviates_by_slope_times_averaging_time(
    overlapping: bool, slope: float, level: float, m: int
) -> None:
    values = level + slope * np.arange(40)

    assert allan_deviation(values, m, overlapping) == pytest.approx(abs(slope) * m / np.sqrt(2), abs=1e-10)


@pytest.mark.judges
@pytest.mark.parametrize(("overlapping", "judge"), [(False, "adev"), (True, "oadev")])
def test_an_independent_judge_finds_the_same_deviation(overlapping: bool, judge: str) -> None:
    allantools = pytest.importorskip("allantools")
    values = np.random.default_rng(6).normal(size=300)

    found = [allan_deviation(values, m, overlapping) for m in (1, 4, 25)]

    _, judged, _, _ = getattr(allantools, judge)(values, data_type="freq", taus=[1, 4, 25])
    assert found == pytest.approx(judged, rel=1e-12)


def test_too_short_a_series_is_refused() -> None:
    with pytest.raises(ValueError, match="over 3 values needs 6 or more, not 5"):
        allan_deviation([1.0] * 5, 3)


def walk(seed: int, samples: int, step_var: float, noise_var: float) -> np.ndarray:
    generator = np.random.default_rng(seed)
    steps = np.cumsum(generator.normal(0.0, np.sqrt(step_var), samples))
    return steps + generator.normal(0.0, np.sqrt(noise_var), samples)


@pytest.mark.parametrize("noise_var", [None, 1e-6])
def test_a_random_walk_shows_its_variance_at_every_lag_without_the_counting_noise(
    noise_var: float | None,
) -> None:
    lags_s = [2.0, 8.0, 20.0]
    found = np.mean(
        [
            structure_function(walk(seed, 4000, 1e-7, 1e-6), np.arange(4000) * 2.0, lags_s, noise_var)
            for seed in range(25)
        ],
        axis=0,
    )

    # 25 walks of 4000 steps: D scatters by about sqrt(2 * 4/3 * steps in the lag / 1e5) of itself (0.5 to
    # 1.6 %), and by the noise, 2e-6 * sqrt(6/1e5) at most: four standard errors.
    expected = np.array(lags_s) / 2 * 1e-7
    tolerance = 4 * (expected * np.sqrt(2.7 * np.array(lags_s) / 2 / 1e5) + 2e-6 * np.sqrt(6 / 1e5))
    assert np.all(np.abs(found - expected) < tolerance)


def test_counting_noise_alone_leaves_nothing() -> None:
    generator = np.random.default_rng(8)
    counts = generator.poisson(1e4, 5000).astype(float)

    found = structure_function(np.log(counts), np.arange(5000.0), [1.0, 10.0, 100.0], 1 / counts)

    # D of white noise 2e-4, its standard error about 2e-4 * sqrt(3/5000) = 5e-6: four of them.
    assert np.abs(found).max() < 2e-5


def test_a_straight_drift_is_not_taken_for_noise() -> None:
    found = structure_function(0.01 * np.arange(50.0), np.arange(50.0), [1.0, 5.0])

    assert found == pytest.approx([1e-4, 25e-4])


def test_gaps_make_no_false_pairs() -> None:
    time_s = np.array([0.0, 1.0, 2.0, 100.0, 101.0, 102.0])
    log_rate = np.array([0.0, 1.0, 2.0, 50.0, 51.0, 52.0])

    found = structure_function(log_rate, time_s, [1.0, 2.0, 40.0], 0.0)

    assert found[:2] == pytest.approx([1.0, 4.0])
    assert np.isnan(found[2])


@pytest.mark.parametrize("time_s", [[0.0, 1.0], [0.0, 2.0, 1.0], [0.0, 0.0, 1.0]])
def test_times_must_rise_and_fit_the_rates(time_s: list[float]) -> None:
    with pytest.raises(ValueError, match="a rising time for each"):
        structure_function([1.0, 2.0, 3.0], time_s, [1.0])
