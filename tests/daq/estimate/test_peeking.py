from __future__ import annotations

from itertools import pairwise
from math import inf, isinf

import numpy as np
import pytest
from scipy.stats import t as student

from daq.estimate import anytime_multiplier, jackknife


def test_the_band_is_infinite_first_and_then_falls_to_the_plan() -> None:
    band = [anytime_multiplier(pairs, 20) for pairs in range(1, 21)]

    assert [isinf(multiplier) for multiplier in band] == [True] * 5 + [False] * 15
    assert all(earlier >= later for earlier, later in pairwise(band))


@pytest.mark.parametrize("planned", [2, 3, 8, 19, 200, 2000])
def test_the_band_at_the_plan_costs_about_half_as_much_again_as_the_t_bar(planned: int) -> None:
    ratio = anytime_multiplier(planned, planned) / student.ppf(0.975, planned - 1)

    assert 1.54 < ratio < 3.2


def test_a_smaller_error_makes_the_band_wider() -> None:
    assert (
        anytime_multiplier(19, 19, 0.01) > anytime_multiplier(19, 19, 0.05) > anytime_multiplier(19, 19, 0.32)
    )


@pytest.mark.parametrize(("pairs", "planned"), [(0, 20), (1, 20), (5, 1), (5, 0)])
def test_no_band_without_two_pairs_or_a_plan(pairs: int, planned: int) -> None:
    assert anytime_multiplier(pairs, planned) == inf


def test_an_alpha_outside_zero_and_one_is_refused() -> None:
    with pytest.raises(ValueError, match="alpha must lie between 0 and 1"):
        anytime_multiplier(5, 20, 1.0)


def test_a_night_that_is_watched_leaves_the_band_in_less_than_one_of_twenty() -> None:
    nights, pairs = 4000, 20
    values = np.random.default_rng(17).normal(size=(nights, pairs))
    looks = np.arange(2, pairs + 1)
    mean = np.cumsum(values, axis=1)[:, 1:] / looks
    squares = np.cumsum(values**2, axis=1)[:, 1:]
    se = np.sqrt((squares - looks * mean**2) / (looks - 1) / looks)

    crossed = np.any(np.abs(mean) > se * [anytime_multiplier(n, pairs) for n in looks], axis=1).mean()
    peeked = np.any(np.abs(mean) > se * student.ppf(0.975, looks - 1), axis=1).mean()

    # Known from 20 000 nights: 1.5 % and 26 %; standard errors here 0.2 % and 0.7 %, five of them.
    assert crossed == pytest.approx(0.015, abs=0.010)
    assert peeked == pytest.approx(0.260, abs=0.035)


def test_the_jackknife_of_a_mean_is_its_standard_error() -> None:
    values = np.random.default_rng(2).normal(size=12)
    without = (values.sum() - values) / 11

    se, dof = jackknife(without)

    assert se == pytest.approx(values.std(ddof=1) / np.sqrt(12), rel=1e-12)
    assert dof == 11


@pytest.mark.parametrize("blocks", [[], [1.0], [[1.0, 2.0], [3.0, 4.0]]])
def test_a_jackknife_needs_two_blocks(blocks: list[float]) -> None:
    with pytest.raises(ValueError, match="two or more blocks"):
        jackknife(blocks)
