"""Cost: what each visit weighs in kappa, and what counting and drift then do to it."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from daq.estimate.contrast import contrast, divisor_gradient, epsilon_and_delta, planned_signs
from daq.estimate.linearity import marginal_weights
from daq.estimate.slits import planned_weights
from daq.itinerary.orders import FloatArray, IntArray


@dataclass(frozen=True, slots=True)
class Pattern:
    """Expected rates by position and opening (J, K), and how positions and pairwise terms are weighed."""

    openings: IntArray
    slits: int
    rates_hz: FloatArray
    weights: FloatArray
    signs: Mapping[str, FloatArray]
    normalisation: str

    def sensitivity(self) -> FloatArray:
        """Return d kappa / d rate, (J, K) [s]; both numerator and divisor."""
        what = contrast(tuple(map(int, self.openings)), self.slits)
        signs = planned_signs(self.signs, what)
        epsilon, delta = epsilon_and_delta(self.rates_hz, what, self.normalisation, signs)
        total = float(self.weights @ delta)
        value = float(self.weights @ epsilon) / total
        slope = divisor_gradient(self.rates_hz, self.weights, what, self.normalisation, signs)
        return np.asarray((self.weights[:, None] * what.residual - value * slope) / total)

    def kappa_of(self, rates_hz: FloatArray) -> float:
        """Return kappa of other rates under the planned weights and signs."""
        what = contrast(tuple(map(int, self.openings)), self.slits)
        signs = planned_signs(self.signs, what)
        epsilon, delta = epsilon_and_delta(rates_hz, what, self.normalisation, signs)
        return float(self.weights @ epsilon) / float(self.weights @ delta)

    def counting_variances(self, exposure_s: FloatArray, dead_time_s: float) -> FloatArray:
        """Return what the counts of each opening and position add to the variance of kappa, (J, K).

        Notes
        -----
        var(rate) = rate (1 + rate x dead time) / live time, non-paralysable, first order.
        """
        variance = self.rates_hz * (1.0 + self.rates_hz * dead_time_s) / exposure_s
        return np.asarray(self.sensitivity() ** 2 * variance)

    def visit_weights(self, position: IntArray, opening: IntArray, dwell_s: FloatArray) -> FloatArray:
        """Return d kappa / d log(rate) of every visit; the sum is zero, so that a common factor cancels."""
        exposure_s = exposures_s(position, opening, dwell_s, self.rates_hz.shape)
        pull = self.sensitivity() * self.rates_hz / exposure_s
        return np.asarray(pull[position, opening] * dwell_s)


def pattern_of(
    rates_hz: FloatArray,
    openings: IntArray,
    slits: int,
    normalisation: str,
    counts: bool,
    exposure_s: FloatArray | None = None,
) -> Pattern:
    """Return a pattern with the position weights of least variance for its counting times (equal: None).

    Parameters
    ----------
    counts
        Whether counts are counted: then a small dead time left over must not move kappa.
    """
    weights, signs = planned_weights(rates_hz, openings, slits, exposure_s)
    if counts:
        weights = marginal_weights(weights, rates_hz, openings, slits, exposure_s)
    return Pattern(openings, slits, rates_hz, weights, signs, normalisation)


def exposures_s(
    position: IntArray, opening: IntArray, dwell_s: FloatArray, shape: tuple[int, ...]
) -> FloatArray:
    """Return the counting time of every opening at every position, shape (positions, openings) [s]."""
    cell = position * shape[1] + opening
    sums = np.bincount(cell, weights=dwell_s, minlength=shape[0] * shape[1])
    return np.asarray(sums.reshape(shape), float)
