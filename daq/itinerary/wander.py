"""Wander: how the logarithm of a source's rate moves, and what that costs kappa."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from daq.itinerary.orders import FloatArray

_LARGEST_EXPONENT = 300.0  # within one block of the recursion below: far from the largest float


@dataclass(frozen=True, slots=True)
class Wander:
    """The structure function D(l) = E[(g(t + l) - g(t))^2] of the log rate g, as a sum of simple parts.

    `walk_per_s` q: random walk, q l. `ramp_per_s2` r: slow slope of unknown sign, r l^2. `relaxing`
    (variance v, time T): wandering about a mean, 2 v (1 - exp(-l/T)). `lines` (amplitude a, period P): a
    sinusoid of unknown phase, a^2 (1 - cos 2 pi l/P).
    """

    walk_per_s: float = 0.0
    ramp_per_s2: float = 0.0
    relaxing: tuple[tuple[float, float], ...] = ()
    lines: tuple[tuple[float, float], ...] = ()

    def structure(self, lag_s: FloatArray) -> FloatArray:
        """Return D at lags [s]."""
        lag_s = np.asarray(lag_s, float)
        total = self.walk_per_s * lag_s + self.ramp_per_s2 * lag_s**2
        total += sum(2 * var * -np.expm1(-lag_s / time_s) for var, time_s in self.relaxing)
        return np.asarray(
            total + sum(size**2 * (1 - np.cos(2 * np.pi * lag_s / period_s)) for size, period_s in self.lines)
        )


def wander_variance(weight: FloatArray, start_s: FloatArray, dwell_s: FloatArray, wander: Wander) -> float:
    """Return the variance of sum_v weight_v (mean of g over visit v), for weights that add up to zero.

    Parameters
    ----------
    weight, start_s, dwell_s
        By visit, in order of time, gates not overlapping.

    Notes
    -----
    V = -sum_{v<w} c_v c_w D(t_w - t_v), with g averaged over each gate; every part of D needs one pass.
    With dwell 0 the visits are points in time.
    """
    middle_s = start_s + dwell_s / 2
    middle_s = middle_s - middle_s.mean()
    total = wander.walk_per_s * _walked(weight, start_s, dwell_s)
    total += wander.ramp_per_s2 * float(weight @ middle_s) ** 2
    total += sum(var * _relaxed(weight, start_s, dwell_s, time_s) for var, time_s in wander.relaxing)
    return float(total + line_variance(weight, start_s, dwell_s, wander.lines))


def line_variance(
    weight: FloatArray, start_s: FloatArray, dwell_s: FloatArray, lines: tuple[tuple[float, float], ...]
) -> float:
    """Return the variance that sinusoids of unknown phase bring, amplitude and period [s] each."""
    middle_s = start_s + dwell_s / 2
    total = 0.0
    for size, period_s in lines:
        phases = np.exp(2j * np.pi * middle_s / period_s) * np.sinc(dwell_s / period_s)
        total += size**2 / 2 * abs(weight @ phases) ** 2
    return float(total)


def _walked(weight: FloatArray, start_s: FloatArray, dwell_s: FloatArray) -> float:
    """Return INT (cumulated weight)^2 dt, the weight of a visit taken up evenly while its gate is open."""
    after = np.cumsum(weight)
    before = after - weight
    gap_s = start_s[1:] - start_s[:-1] - dwell_s[:-1]
    inside = dwell_s @ (before**2 + before * after + after**2) / 3
    return float(gap_s @ after[:-1] ** 2 + inside)


def _relaxed(weight: FloatArray, start_s: FloatArray, dwell_s: FloatArray, time_s: float) -> float:
    """Return sum_vw c_v c_w r(v, w), r the correlation exp(-lag/T) of the means over two gates."""
    x = dwell_s / time_s
    small = x < 1e-4
    safe = np.where(small, 1.0, x)
    edge = np.where(small, 1 - x / 2, -np.expm1(-safe) / safe)
    own = np.where(small, 1 - x / 3, 2 * (safe + np.expm1(-safe)) / safe**2)
    carried = _carried(weight * edge, start_s / time_s, (start_s + dwell_s) / time_s)
    return float(weight**2 @ own + 2 * (weight * edge) @ carried)


def _carried(weight: FloatArray, start: FloatArray, stop: FloatArray) -> FloatArray:
    """Return sum_{v<w} weight_v exp(-(start_w - stop_v)) for every w, block by block: nothing overflows."""
    carried = np.zeros_like(weight)
    held, at = 0.0, float(start[0])
    for first, last in _blocks(stop):
        starts, ends, origin = start[first:last], stop[first:last], float(stop[first])
        inside = np.concatenate([[0.0], np.cumsum(weight[first:last] * np.exp(ends - origin))])
        fades = np.exp(-np.maximum(starts - origin, 0.0))
        carried[first:last] = held * np.exp(-(starts - at)) + inside[:-1] * fades
        held = float(held * np.exp(-(ends[-1] - at)) + inside[-1] * np.exp(-(ends[-1] - origin)))
        at = float(ends[-1])
    return carried


def _blocks(stop: FloatArray) -> list[tuple[int, int]]:
    """Return ranges of visits that end within the largest exponent of one another, one visit at least."""
    number: NDArray[np.int64] = np.floor((stop - stop[0]) / _LARGEST_EXPONENT).astype(np.int64)
    edges = np.flatnonzero(np.diff(number)) + 1
    bounds = [0, *edges.tolist(), len(stop)]
    return list(pairwise(bounds))
