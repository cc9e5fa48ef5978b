"""Levels: the bend of a monitor from two sets of counts, against the formula of its error."""

from __future__ import annotations

import numpy as np

from daq.tasks.levels import bend

SHARES = np.array([1.0, 0.5, 0.25, 0.125, 0.0625])


def test_the_bend_scatters_by_its_formula_and_is_not_off() -> None:
    random, truth, top = np.random.default_rng(1), 0.01, 1e6
    light, shown = top * SHARES, top * SHARES * np.exp(truth * SHARES)

    found = [
        bend(np.asarray(random.poisson(shown), float), np.asarray(random.poisson(light), float))
        for _ in range(400)
    ]

    shares = np.array([one.share for one in found])
    # weights w = mn/(m + n) = top x / 2: variance of the slope 1 / (sum w x^2 - (sum w x)^2 / sum w)
    weight = top * SHARES / 2
    said = 1 / np.sqrt(np.sum(weight * SHARES**2) - np.sum(weight * SHARES) ** 2 / np.sum(weight))
    assert abs(shares.mean() - truth) < 4 * said / np.sqrt(400)
    assert abs(shares.std(ddof=1) / said - 1) < 4 / np.sqrt(2 * 400)
