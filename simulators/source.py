"""Source: how its strength drifts, a function of time alone."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence

import numpy as np
from numpy.typing import NDArray

from simulators.draws import generator

FloatArray = NDArray[np.float64]
Factor = Callable[[FloatArray], FloatArray]

HOUR_S = 3600.0
GRID_S = 0.25
BLOCK = 4096


def linear(per_hour: float) -> Factor:
    """Return the factor of a linear drift, 1 at time zero; a source that has run dry stays at zero."""
    return lambda time_s: np.maximum(1.0 + per_hour * time_s / HOUR_S, 0.0)


def between(levels: Sequence[tuple[float, float]]) -> Factor:
    """Return the factor that has these values at these times [s], straight between, the same beyond."""
    times_s, values = (np.array(column) for column in zip(*levels, strict=True))
    return lambda time_s: np.interp(time_s, times_s, values)


class RandomWalk:
    """The factor exp(W) of a random walk W of the logarithm, variance `per_sqrt_hour`**2 times hours.

    Steps of `GRID_S` from a counter-based generator, summed block by block as far as time has been asked for,
    with straight lines between: any time may be asked for, in any order.
    """

    def __init__(self, per_sqrt_hour: float, seed: int) -> None:
        self._step = per_sqrt_hour * np.sqrt(GRID_S / HOUR_S)
        self._seed = seed
        self._walk: FloatArray = np.zeros(1)

    def __call__(self, time_s: FloatArray) -> FloatArray:
        """Return the factor at times not before zero [s]."""
        steps = np.asarray(time_s, dtype=float) / GRID_S
        self._extend(int(np.max(steps)) + 1)
        whole = np.minimum(steps.astype(int), len(self._walk) - 2)
        below, above = self._walk[whole], self._walk[whole + 1]
        return np.exp(below + (steps - whole) * (above - below))

    def _extend(self, steps: int) -> None:
        """Know the walk up to a step, and then some way further: a long run is not copied block by block."""
        if len(self._walk) > steps:
            return
        known = (len(self._walk) - 1) // BLOCK
        pieces = [self._walk]
        for block in range(known, max(steps // BLOCK + 1, known * 5 // 4)):
            draws = generator(self._seed, "source walk", block).standard_normal(BLOCK)
            pieces.append(pieces[-1][-1] + self._step * np.cumsum(draws))
        self._walk = np.concatenate(pieces)


def relative(factors: Sequence[Factor], time_s: FloatArray) -> FloatArray:
    """Return the strength of the source, 1 at time zero, at times [s] not before zero."""
    product = np.ones(np.shape(time_s))
    for factor in factors:
        product = product * factor(time_s)
    return product


def mean_relative(factors: Sequence[Factor], start_s: float, stop_s: float) -> float:
    """Return the mean strength of the source between two times.

    Notes
    -----
    Trapezia between the points of the random walk's grid, where its logarithm is straight: for a step of s in
    the logarithm the error is s**2 / 12 of the mean (below 1e-7 for 10 % per square root of an hour).
    """
    first, last = int(start_s // GRID_S) + 1, math.ceil(stop_s / GRID_S)
    time_s = np.array([start_s, *(step * GRID_S for step in range(first, last)), stop_s])
    strength, width_s = relative(factors, time_s), time_s[1:] - time_s[:-1]
    return float(width_s @ (strength[1:] + strength[:-1])) / (2 * (stop_s - start_s))
