"""Scale: periods and middles with the errors that they say; a fringe that is not there is a sentence."""

from __future__ import annotations

import numpy as np
import pytest

from daq.errors import DaqError
from daq.tasks.scale import Fringe, fringe

PLACE_MM = np.linspace(-12.8, 12.8, 79)
PERIOD_MM, MIDDLE_MM, VISIBILITY = 5.32, 0.11, 0.9


def scanned(random: np.random.Generator, period_mm: float = PERIOD_MM, alone: float = 20_000.0) -> Fringe:
    """Return the fit of one scan: both slits alone, the pair, and none, all counted."""
    envelope = alone * np.sinc(PLACE_MM / 16.0) ** 2
    none = np.full(len(PLACE_MM), 400.0)
    wave = np.cos(2 * np.pi * (PLACE_MM - MIDDLE_MM) / period_mm)
    both = none + 2 * envelope * (1 + VISIBILITY * wave)
    a, b, dark, pair = (
        random.poisson(one).astype(float) for one in (envelope + none, envelope + none, none, both)
    )
    return fringe(PLACE_MM, pair, (a, b), dark, period_mm * 1.01)


def test_period_and_middle_scatter_as_they_say_and_are_not_off() -> None:
    random = np.random.default_rng(1)

    found = [scanned(random) for _ in range(300)]

    for value, se, truth in (
        ([one.period_mm for one in found], [one.period_se_mm for one in found], PERIOD_MM),
        ([one.middle_mm for one in found], [one.middle_se_mm for one in found], MIDDLE_MM),
    ):
        said = float(np.mean(se))
        assert abs(np.mean(value) - truth) < 4 * said / np.sqrt(300)
        # the envelope is counted too: the errors are not too small, and at most a quarter too large
        assert 0.75 < np.std(value, ddof=1) / said < 1.0 + 4 / np.sqrt(2 * 300)


def test_the_fringe_of_the_outer_slits_is_half_as_wide_and_seldom_said_not_to_be() -> None:
    random, trials = np.random.default_rng(2), 300

    z = []
    for _ in range(trials):
        inner, outer = scanned(random), scanned(random, PERIOD_MM / 2)
        apart = 2 * outer.period_mm - inner.period_mm
        z.append(apart / np.hypot(2 * outer.period_se_mm, inner.period_se_mm))

    assert np.mean(np.abs(z) > 3) <= 0.01  # 0.27 % of a normal law; 300 trials give at most 3 once in 200
    assert abs(np.mean(z)) < 4 / np.sqrt(trials)


def test_light_without_a_fringe_is_refused_with_a_sentence() -> None:
    random = np.random.default_rng(3)
    flat = random.poisson(np.full(len(PLACE_MM), 40_400.0)).astype(float)
    alone = random.poisson(np.full(len(PLACE_MM), 20_400.0)).astype(float)

    with pytest.raises(DaqError, match=r"no fringe of about 5\.32 mm is seen"):
        fringe(PLACE_MM, flat, (alone, alone), np.full(len(PLACE_MM), 400.0), PERIOD_MM)
