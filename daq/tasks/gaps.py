"""Gaps: the dead time that the times between counts show, and whether these are those of an even rate.

A rate that sags without a dead time is not seen here; what comes too soon after a count (afterpulses,
ringing) is.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt

import numpy as np
from numpy.typing import NDArray

from daq.estimate.arrays import FloatArray
from daq.tasks.refusals import hopeless

NAME = "deadtime"
ROUNDS = 3  # of rate and edge in turn
FEW = 1000  # gaps: fewer say nothing
BINS, LEAST = 40, 25.0  # of the histogram, and the counts that are expected in each at least
SOON = 0.1  # of the mean gap: what comes sooner and too often follows a count

Ticks = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Gaps:
    """What gaps say.

    Attributes
    ----------
    tau_s, se_s
        The dead time and its standard error [s].
    number
        How many gaps.
    edges_s, ratio, ratio_se
        Ends of bins of gaps, the gaps in each over those that an even rate has there, and its error.
    chi2, dof
        Of that ratio against one.
    soon, soon_se
        Counts that follow another too soon, over all.
    """

    tau_s: float
    se_s: float
    number: int
    edges_s: FloatArray
    ratio: FloatArray
    ratio_se: FloatArray
    chi2: float
    dof: int
    soon: float
    soon_se: float


def dead_time_of_gaps(gates: Sequence[Ticks], tick_s: float) -> Gaps:
    """Return the dead time from the times of the counts of one channel, gate by gate, in the counter's ticks.

    Notes
    -----
    Beyond the dead time gaps follow n exp(-n t), and n and their number N are found from the longer ones,
    which nothing follows too soon: K = n N (g - tau) gaps are shorter than g, close to the edge. With g half
    a tick above the next to shortest gap that can be told apart, tau = g - K/(n N) and its standard error is
    sqrt(K)/(n N): for a fine tick K is 1, for a coarse one rounding averages out.

    Raises
    ------
    DaqError
        When there are next to no gaps.
    """
    gaps = [np.diff(times) for times in gates]
    whole = np.concatenate(gaps)
    if len(whole) < FEW:
        raise hopeless(
            NAME,
            f"{len(whole)} gaps between counts are too few",
            "See that light falls on the detector, then repeat",
        )
    shortest = int(whole.min())
    close = int(np.count_nonzero(whole <= shortest + 1))
    later = _later(gaps, shortest + max(1.0, np.ceil(SOON * (float(whole.mean()) - shortest))) + 0.5)
    tau = shortest + 0.5
    for _ in range(ROUNDS):
        tau = shortest + 1.5 - close / float(later.rates @ later.numbers(tau))
    se = sqrt(close) / float(later.rates @ later.numbers(tau))
    return Gaps(tau * tick_s, se * tick_s, len(whole), *_histogram(whole, tau, later, tick_s))


@dataclass(frozen=True, slots=True)
class _Later:
    """The gaps of every gate above a length: how many, and the rate of arrivals that their mean says."""

    above: float
    many: FloatArray
    rates: FloatArray

    def numbers(self, tau: float) -> FloatArray:
        """Return how many gaps an even rate has in all, gate by gate."""
        return np.asarray(self.many * np.exp(self.rates * (self.above - tau)))

    def between(self, ends: FloatArray, tau: float) -> FloatArray:
        """Return how many gaps an even rate has between two ends that follow one another, of all gates."""
        beyond = self.numbers(tau) @ np.exp(-np.outer(self.rates, ends - tau))
        return np.asarray(beyond[:-1] - beyond[1:])


def _later(gaps: Sequence[Ticks], above: float) -> _Later:
    kept = [gap[gap > above] for gap in gaps]
    kept = [gap for gap in kept if len(gap)]
    many = np.array([len(gap) for gap in kept], float)
    return _Later(above, many, np.array([1 / (float(gap.mean()) - above) for gap in kept]))


def _histogram(
    gaps: Ticks, tau: float, later: _Later, tick_s: float
) -> tuple[FloatArray, FloatArray, FloatArray, float, int, float, float]:
    """Return bins, ratio to an even rate and its error, chi2, its freedom, and what comes too soon."""
    edges = _edges(tau, later)
    ends = np.append(edges, np.inf)
    expected = later.between(ends, tau)
    seen = np.diff(np.searchsorted(np.sort(gaps), ends)).astype(float)
    chi2 = float(np.sum((seen - expected) ** 2 / expected))
    ratio, ratio_se = (seen / expected)[:-1], (1 / np.sqrt(expected))[:-1]
    # number and rate were found from the same gaps
    return edges * tick_s, ratio, ratio_se, chi2, len(expected) - 2, *_soon(len(gaps), tau, later)


def _soon(number: int, tau: float, later: _Later) -> tuple[float, float]:
    """Return which share of the counts come too soon after another, and its standard error."""
    many = float(later.many.sum())
    grown = float(later.numbers(tau).sum()) / many
    of_later = (grown - 1) ** 2 + (grown * np.log(grown)) ** 2  # its number, and its rate
    return 1 - grown * many / number, sqrt(number - many + many * of_later) / number


def _edges(tau: float, later: _Later) -> FloatArray:
    """Return the lower ends of bins, evenly by their logarithm, in which enough gaps are expected."""
    mean = float(later.many.sum() / (later.rates @ later.many))
    # half-way between ticks, so that a gap of whole ticks lies in one bin
    wanted = np.geomspace(max(2.0, 1e-4 * mean), 4 * mean, BINS)
    candidates = np.floor(tau) + np.unique(np.ceil(wanted)) + 0.5
    kept = [float(candidates[0])]
    for edge in candidates[1:]:
        if later.between(np.array([kept[-1], edge]), tau)[0] >= LEAST:
            kept.append(float(edge))
    return np.array(kept)
