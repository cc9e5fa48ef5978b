"""Charts: CUSUM and EWMA against a fixed target, and how long they run before an alarm."""

from __future__ import annotations

from dataclasses import dataclass
from itertools import accumulate

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import ndtr

from daq.estimate.arrays import FloatArray, IntArray

NODES_PER_SIGMA = 6  # Gauss nodes per standard deviation of the kernel: eight digits of the run length


@dataclass(frozen=True, slots=True)
class Cusum:
    """Sums above and below the target after each value, and the index of every value in alarm."""

    high: FloatArray
    low: FloatArray
    alarms: IntArray


@dataclass(frozen=True, slots=True)
class Ewma:
    """The moving average after each value, its limits, and the index of every value in alarm."""

    average: FloatArray
    lower: float
    upper: float
    alarms: IntArray


def cusum(values: ArrayLike, target: float, k: float, h: float) -> Cusum:
    """Return the tabular CUSUM of values; it is not set back after an alarm.

    Parameters
    ----------
    k, h
        Allowance and decision limit, in the unit of the values.

    References
    ----------
    .. [1] "Continuous inspection schemes", Biometrika 41, 100 (1954); NIST/SEMATECH e-Handbook, 6.3.2.3.
    """
    deviation = np.asarray(values, float) - target
    high, low = _one_sided(deviation - k), _one_sided(-deviation - k)
    return Cusum(high, low, np.flatnonzero((high > h) | (low > h)))


def ewma(values: ArrayLike, target: float, sigma: float, weight: float, limit: float) -> Ewma:
    """Return the exponentially weighted moving average of values, started at the target.

    Parameters
    ----------
    sigma
        Standard deviation of one value.
    weight
        Share of the newest value, above 0, at most 1.
    limit
        Distance of the limits from the target, in standard deviations of the settled average.

    References
    ----------
    .. [1] NIST/SEMATECH e-Handbook, 6.3.2.4.
    """
    _check_weight(weight)
    series = accumulate(
        np.asarray(values, float).tolist(), lambda mean, value: mean + weight * (value - mean), initial=target
    )
    average = np.array(list(series)[1:])
    half = limit * sigma * float(np.sqrt(weight / (2 - weight)))
    return Ewma(average, target - half, target + half, np.flatnonzero(np.abs(average - target) > half))


def cusum_run_length(k: float, h: float, shift: float) -> float:
    """Return the mean number of values before a two-sided CUSUM alarms.

    Parameters
    ----------
    k, h, shift
        Allowance, decision limit and shift of the mean, in standard deviations of independent normal values.

    Notes
    -----
    Integral equation of each side on Gauss-Legendre nodes; the sides combine as 1/L = 1/L_high + 1/L_low.

    References
    ----------
    .. [1] "Continuous inspection schemes", Biometrika 41, 100 (1954), the integral equation.
    """
    if not (h > 0 and k >= 0):
        raise ValueError(f"a CUSUM needs h above zero and k not below it, not h = {h:g}, k = {k:g}")
    return 1 / (1 / _one_sided_run_length(k - shift, h) + 1 / _one_sided_run_length(k + shift, h))


def ewma_run_length(weight: float, limit: float, shift: float) -> float:
    """Return the mean number of values before an EWMA with settled limits alarms, started at the target.

    Parameters
    ----------
    shift
        Shift of the mean, in standard deviations of independent normal values.

    References
    ----------
    .. [1] "Exponentially weighted moving average control schemes: properties and enhancements",
       Technometrics 32, 1 (1990); integral equation on Gauss-Legendre nodes.
    """
    _check_weight(weight)
    half = limit * float(np.sqrt(weight / (2 - weight)))
    nodes, shares = _nodes(-half, half, 2 * half / weight)

    def kernel(start: FloatArray) -> FloatArray:
        step = (nodes - (1 - weight) * start[:, None]) / weight - shift
        return _bell(step) * shares / weight

    lengths = np.linalg.solve(np.eye(len(nodes)) - kernel(nodes), np.ones(len(nodes)))
    return float(1 + (kernel(np.zeros(1)) @ lengths)[0])


def _one_sided(steps: FloatArray) -> FloatArray:
    """Return sums that start at zero and never fall below it."""
    walk = np.cumsum(steps)
    return np.asarray(walk - np.minimum(np.minimum.accumulate(walk), 0.0))


def _one_sided_run_length(allowance: float, h: float) -> float:
    """Return the mean run length L(0) of one side: L(u) = 1 + L(0) F(a - u) + INT_0^h L f(y + a - u) dy."""
    nodes, shares = _nodes(0.0, h, h)
    starts = np.append(nodes, 0.0)[:, None]
    kernel = np.hstack([_bell(nodes + allowance - starts) * shares, ndtr(allowance - starts)])
    lengths = np.linalg.solve(np.eye(len(starts)) - kernel, np.ones(len(starts)))
    return float(lengths[-1])


def _nodes(low: float, high: float, sigmas: float) -> tuple[FloatArray, FloatArray]:
    """Return Gauss-Legendre nodes and weights on an interval so many standard deviations long."""
    points, shares = np.polynomial.legendre.leggauss(max(64, int(NODES_PER_SIGMA * sigmas)))
    return (low + high) / 2 + (high - low) / 2 * points, (high - low) / 2 * shares


def _bell(x: FloatArray) -> FloatArray:
    return np.asarray(np.exp(-(x**2) / 2) / np.sqrt(2 * np.pi))


def _check_weight(weight: float) -> None:
    if not 0 < weight <= 1:
        raise ValueError(f"the weight of a moving average lies above 0 and at most at 1, not at {weight:g}")
