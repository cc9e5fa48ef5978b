"""Walk: a random walk seen through noise, its precision matrix, and the likeliest size of its steps."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from math import exp, log, sqrt

import numpy as np
from scipy.linalg.lapack import dpttrf, dpttrs

from daq.estimate.arrays import FloatArray

EVALUATIONS = 26  # golden sections: 40 e-folds come down to 2e-4
GOLDEN = (sqrt(5) - 1) / 2


@dataclass(frozen=True, slots=True)
class Walk:
    """W + K, factored: `weights` (V) of the samples plus the precision of the walk; and K itself by steps."""

    stiffness: FloatArray
    diagonal: FloatArray
    below: FloatArray

    def solve(self, right: FloatArray) -> FloatArray:
        """Return (W + K)^-1 times a vector."""
        return np.asarray(dpttrs(self.diagonal, self.below, right)[0])

    def pull(self, level: FloatArray) -> FloatArray:
        """Return K times a vector: how the steps pull at every sample."""
        force = np.diff(level) * self.stiffness
        return -np.diff(force, prepend=0.0, append=0.0)

    @property
    def log_determinant(self) -> float:
        """The logarithm of the determinant of W + K."""
        return float(np.log(self.diagonal).sum())


def walk(weights: FloatArray, step_s: FloatArray, per_s: float) -> Walk:
    """Return the factored matrix of a walk of variance `per_s` a second.

    Parameters
    ----------
    weights
        Inverse variance of each sample's noise; zero where there is none.
    step_s
        Time between neighbouring samples [s], above zero.
    """
    stiffness = 1 / (per_s * step_s)
    diagonal = weights.copy()
    diagonal[:-1] += stiffness
    diagonal[1:] += stiffness
    factor, below, failed = dpttrf(diagonal, -stiffness)
    if failed:
        raise ValueError("a random walk needs at least one sample with a weight")
    return Walk(stiffness, factor, below)


def likeliest_per_s(weights: FloatArray, seen: FloatArray, step_s: FloatArray) -> float:
    """Return the variance per second of the walk that makes samples likeliest.

    Parameters
    ----------
    seen
        Samples of the walk, each with noise of variance 1/weight; without a weight they do not matter.

    Notes
    -----
    Local-level model with a free first level; golden section on the logarithm. The smallest value that is
    told stands for none: its drift over all samples is a tenth of what they can show.

    References
    ----------
    .. [1] "Forecasting, Structural Time Series Models and the Kalman Filter", ch. 2, from memory.
    """
    count = len(weights)
    unit = float(np.mean(weights) * np.mean(step_s))
    low, high = log(0.01 / (unit * count**2)), log(1 / float(np.mean(step_s)))

    def unlikely(log_per_s: float) -> float:
        matrix = walk(weights, step_s, exp(log_per_s))
        misfit = np.sum(weights * seen * (seen - matrix.solve(weights * seen)))
        return matrix.log_determinant + (count - 1) * log_per_s + float(misfit)

    return exp(_least(unlikely, low, max(high, low + 1)))


def _least(function: Callable[[float], float], low: float, high: float) -> float:
    """Return where a function with one valley is least, by golden section."""
    left, right = high - GOLDEN * (high - low), low + GOLDEN * (high - low)
    at_left, at_right = function(left), function(right)
    for _ in range(EVALUATIONS):
        if at_left < at_right:
            high, right, at_right = right, left, at_left
            left = high - GOLDEN * (high - low)
            at_left = function(left)
        else:
            low, left, at_left = left, right, at_right
            right = low + GOLDEN * (high - low)
            at_right = function(right)
    return (low + high) / 2
