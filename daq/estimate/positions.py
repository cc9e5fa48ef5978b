"""Positions: is the signed sum zero everywhere? Tests by turning whole pairs over, once, at the end."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from math import sqrt
from typing import Any

import numpy as np
from scipy.special import stdtr

from daq.estimate.arrays import FloatArray
from daq.estimate.contrast import epsilon_and_delta
from daq.estimate.plan import Plan
from daq.estimate.sums import Sums
from daq.estimate.tables import measured, over, plan_contrast

FLIPS = 1999
EXACT_UP_TO = 12  # pairs: 2048 ways to turn them over
FEWEST_PAIRS = 5  # with four there are 8 ways, and no p below 0.125


@dataclass(frozen=True, slots=True, kw_only=True)
class PositionTests:
    """How often chance alone goes farther: in all positions together, in the largest one, in a ripple.

    `combined_p` of the three. `largest_mm`, `largest_t` and its probability among so many positions (Sidak,
    Student's t); `period_mm` of the strongest ripple, where positions are evenly spaced.
    """

    chi2_p: float
    largest_p: float
    fourier_p: float | None
    combined_p: float
    largest_mm: float
    largest_t: float
    largest_sidak_p: float
    period_mm: float | None
    flips: int

    def to_json(self) -> dict[str, Any]:
        """Return plain numbers by name."""
        return asdict(self)


def position_tests(
    by_pair: FloatArray, variance: FloatArray, positions_mm: FloatArray, flips: FloatArray
) -> PositionTests:
    """Return the tests of what each pair leaves at each position.

    Parameters
    ----------
    by_pair
        (B, J); zero where a pair has no value.
    variance
        Of the mean over pairs by position, from counting: weights only, the tests do not rest on it.
    flips
        What `sign_flips` gave, (F, B).

    Notes
    -----
    Under the null the pairs are symmetric about zero, each as a whole: turning pairs over keeps what
    positions have to do with each other and needs no model of the errors.

    References
    ----------
    .. [1] "Permutation, Parametric and Bootstrap Tests of Hypotheses", 3rd ed., ch. 3 (sign changes), from
       memory.
    """
    pairs = len(by_pair)
    means = flips @ by_pair / pairs
    squares = np.mean(by_pair**2, axis=0)
    scaled = means / np.sqrt(np.where(variance > 0, variance, np.inf))
    largest = over(means**2, np.maximum(squares - means**2, 1e-12 * squares))
    at = int(np.argmax(largest[0]))
    fourier = _fourier(scaled, positions_mm)
    found = [_p(np.sum(scaled**2, axis=1)), _p(largest.max(axis=1))]
    found += [] if fourier is None else [_p(fourier.max(axis=1))]
    t = sqrt((pairs - 1) * float(largest[0, at])) * (1 if means[0, at] >= 0 else -1)
    return PositionTests(
        chi2_p=found[0],
        largest_p=found[1],
        fourier_p=None if fourier is None else found[2],
        combined_p=1 - (1 - min(found)) ** len(found),
        largest_mm=float(positions_mm[at]),
        largest_t=t,
        largest_sidak_p=sidak(2 * float(stdtr(pairs - 1, -abs(t))), len(positions_mm)),
        period_mm=None if fourier is None else _period_mm(fourier[0], positions_mm),
        flips=len(flips) - 1,
    )


def sign_flips(pairs: int, generator: np.random.Generator) -> FloatArray:
    """Return how pairs are turned over (F, B), the first way as they are: every way there is, or 1999 drawn.

    A way and its opposite give the same, so the first pair stays as it is.
    """
    if pairs <= EXACT_UP_TO:
        ways = np.arange(2 ** (pairs - 1))
        return np.column_stack(
            [np.ones(len(ways)), *(1.0 - 2 * (ways >> bit & 1) for bit in range(pairs - 1))]
        )
    drawn = generator.integers(0, 2, (FLIPS, pairs)) * 2.0 - 1.0
    return np.vstack([np.ones(pairs), drawn])


def leftover_by_pair(sums: Sums, plan: Plan) -> tuple[FloatArray, FloatArray]:
    """Return what each pair leaves beside its own kappa, (B, J), and the counting variance of the mean (J).

    A hidden offset of kappa cancels. A position that a pair lacks is zero there.
    """
    what, signs = plan_contrast(plan)
    seen = measured(sums.live)
    rates = over(sums.value, sums.live)
    epsilon, delta = epsilon_and_delta(rates, what, plan.normalisation, signs)
    weights = np.where(seen, plan.weights, 0.0)
    kappa = over(np.sum(weights * epsilon, axis=-1), np.sum(weights * delta, axis=-1))
    rest = np.where(seen, epsilon - kappa[:, None] * delta, 0.0)
    variances = np.where(seen, over(sums.variance, sums.live**2) @ what.residual**2, 0.0)
    return rest, variances.sum(axis=0) / max(len(rest), 1) ** 2


def sidak(p: float, many: int) -> float:
    """Return the probability that the smallest of so many independent p is as small as this one."""
    return float(-np.expm1(many * np.log1p(-min(p, 1 - 1e-15))))


def _p(statistic: FloatArray) -> float:
    """Return the share of ways, the one that was measured among them, that go as far as it."""
    return float(np.mean(statistic >= statistic[0] * (1 - 1e-12)))


def _fourier(scaled: FloatArray, positions_mm: FloatArray) -> FloatArray | None:
    """Return the power at every period (F, J/2); None where positions are few or not evenly spaced."""
    steps = np.diff(positions_mm)
    if len(steps) < 2 or np.ptp(steps) > 1e-6 * abs(steps).max():
        return None
    power: FloatArray = np.abs(np.fft.rfft(scaled, axis=1)[:, 1 : (len(steps)) // 2 + 1]) ** 2
    return power / len(positions_mm)


def _period_mm(power: FloatArray, positions_mm: FloatArray) -> float:
    step = abs(float(positions_mm[1] - positions_mm[0]))
    return step * len(positions_mm) / (int(np.argmax(power)) + 1)
