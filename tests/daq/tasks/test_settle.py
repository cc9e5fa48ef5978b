"""Settle: a transient is found with its errors, and the bound on what a visit is off by holds."""

from __future__ import annotations

import numpy as np

from daq.tasks.settle import TIMES_S, Transient, transient

SINCE_S, GATE_S = np.asarray(0.3 * np.arange(8), float), 0.2


def seen(random: np.random.Generator, size: float, time_s: float, level: float = 3e6) -> Transient:
    """Return the fit of gates, summed over moves, in which a share of the light fades."""
    fading = np.exp(-SINCE_S / time_s) * (1 - np.exp(-GATE_S / time_s)) * time_s / GATE_S
    return transient(np.asarray(random.poisson(level * (1 + size * fading)), float), SINCE_S, GATE_S)


def test_a_transient_of_known_time_scatters_as_it_says_and_is_not_off() -> None:
    random, at = np.random.default_rng(1), 15
    size = 0.01

    found = [seen(random, size, float(TIMES_S[at])) for _ in range(400)]

    values, said = np.array([one.size[at] for one in found]), float(np.mean([one.se[at] for one in found]))
    assert abs(values.mean() - size) < 4 * said / np.sqrt(400)
    assert abs(values.std(ddof=1) / said - 1) < 4 / np.sqrt(2 * 400)


def test_what_a_visit_is_off_by_stays_below_the_bound_in_95_of_100() -> None:
    random, wait_s, dwell_s = np.random.default_rng(2), 0.5, 2.2
    held = 0

    for _ in range(300):
        size, time_s = (
            0.02 * random.standard_normal(),
            float(np.exp(random.uniform(np.log(0.05), np.log(0.7)))),
        )
        found = seen(random, size, time_s)
        bound = found.bias(wait_s, dwell_s, 2.0)[found.chi2 <= found.chi2.min() + 4.0].max()
        truth = abs(size) * time_s / dwell_s * np.exp(-wait_s / time_s) * (1 - np.exp(-dwell_s / time_s))
        held += bool(truth <= bound)

    assert held >= 0.95 * 300
