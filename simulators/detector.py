"""Detector: from the rate of arrivals to a number of counts, dead time included."""

from __future__ import annotations

import math

import numpy as np

# Below this share the counts of a paralysable detector scatter like Poisson counts for all that can be seen.
_SMALL = 1e-6


def draw_counts(
    rate_hz: float, gate_s: float, dead_time_s: float, kind: str, random: np.random.Generator
) -> int:
    """Return the number of counts of one gate: Poisson arrivals, thinned by a dead time.

    Parameters
    ----------
    rate_hz
        Mean rate of arrivals during the gate [1/s], dark counts included.
    gate_s
        Width of the gate [s].
    dead_time_s
        Dead time after a count (non-paralysable) or after an arrival (paralysable) [s].
    kind
        "non-paralysable" (drawn exactly) or "paralysable" (mean and variance of a long gate).
    random
        The gate's own generator.

    Notes
    -----
    The detector is live when the gate opens, and the rate is taken as even over the gate.
    """
    if dead_time_s == 0 or rate_hz == 0:
        return int(random.poisson(rate_hz * gate_s))
    if kind == "paralysable":
        return _paralysable(rate_hz, gate_s, dead_time_s, random)
    return _non_paralysable(rate_hz, gate_s, dead_time_s, random)


def draw_bunched(mean: float, fano: float, random: np.random.Generator) -> int:
    """Return a negative binomial count; its variance is `fano`, above one, times its mean."""
    return int(random.negative_binomial(mean / (fano - 1), 1 / fano)) if mean > 0 else 0


def _non_paralysable(rate_hz: float, gate_s: float, dead_time_s: float, random: np.random.Generator) -> int:
    """Draw exactly, without going through every arrival.

    There are at least k counts when k arrivals fit into the live time that k - 1 dead times leave.  The
    arrivals of two live times that enclose the answer are drawn first; only those between them one by one.
    """

    def expected(counts: int) -> float:
        return rate_hz * max(gate_s - (counts - 1) * dead_time_s, 0.0)

    whole = expected(1)
    arrivals = int(random.poisson(whole))
    inner = expected(max(arrivals, 1))
    least = int(random.binomial(arrivals, inner / whole))
    outer = expected(max(least, 1))
    share = (outer - inner) / (whole - inner) if whole > inner else 0.0
    between = int(random.binomial(arrivals - least, share))
    places = inner + (outer - inner) * np.sort(random.random(between))
    allowed = rate_hz * np.maximum(gate_s - (least + np.arange(between)) * dead_time_s, 0.0)
    fits = np.flatnonzero(places <= allowed)
    return least + (int(fits[-1]) + 1 if fits.size else 0)


def _paralysable(rate_hz: float, gate_s: float, dead_time_s: float, random: np.random.Generator) -> int:
    """Draw a binomial count with the long-gate mean and variance; an approximation, its skew is not matched.

    An arrival counts when none came within a dead time before it, so the mean is nT exp(-x) and the variance
    that times 1 - 2x exp(-x), x = n tau.
    """
    load = rate_hz * dead_time_s
    mean = rate_hz * gate_s * math.exp(-load)
    deficit = 2 * load * math.exp(-load)
    if deficit < _SMALL:
        return int(random.poisson(mean))
    trials = max(round(mean / deficit), math.ceil(mean))
    return int(random.binomial(trials, mean / trials)) if trials else 0
