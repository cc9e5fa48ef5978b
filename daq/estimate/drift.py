"""Drift: how far the source wanders in a given time, with the counting noise taken out."""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from daq.estimate.arrays import FloatArray, IntArray


def allan_deviation(values: ArrayLike, m: int, overlapping: bool = False) -> float:
    """Return the Allan deviation of frequency-type data at an averaging factor.

    Parameters
    ----------
    values
        Evenly spaced rates or frequencies, without gaps; 2 m or more.
    m
        How many values make one mean.
    overlapping
        Use every start, not every m-th.

    References
    ----------
    .. [1] "Handbook of Frequency Stability Analysis", NIST SP 1065 (2008), eqs. (9) and (11), numbers of the
       equations from memory.
    """
    series = np.asarray(values, float)
    if m < 1 or len(series) < 2 * m:
        raise ValueError(
            f"an Allan deviation over {m} values needs {2 * max(m, 1)} or more, not {len(series)}"
        )
    sums = np.concatenate([[0.0], np.cumsum(series)])
    means = (sums[m:] - sums[:-m]) / m
    if not overlapping:
        means = means[: len(series) // m * m : m]
    step = m if overlapping else 1
    return float(np.sqrt(np.mean((means[step:] - means[:-step]) ** 2) / 2))


def structure_function(
    log_rate: ArrayLike,
    time_s: ArrayLike,
    lags_s: ArrayLike,
    log_rate_var: ArrayLike | None = None,
) -> FloatArray:
    """Return D(l) = E[(g(t + l) - g(t))^2] of the log rate g without counting noise; NaN without samples.

    Parameters
    ----------
    log_rate, time_s
        Logarithm of the rate, and the time of each sample [s], rising; gaps are allowed.
    lags_s
        Lags [s]; a pair of samples counts when its distance is nearer to the lag than half a sample.
    log_rate_var
        Variance that counting gives each log rate, 1/N for N counts. Without it the part of D that does not
        fade towards lag 0 is taken for noise, 2 D(1) - D(2) at one and two samples.

    Notes
    -----
    The variance of adjacent means, where the drift is slow, is D/2.
    """
    rates, times, lags = (np.atleast_1d(np.asarray(column, float)) for column in (log_rate, time_s, lags_s))
    if len(rates) != len(times) or len(times) < 2 or not np.all(np.diff(times) > 0):
        raise ValueError("a structure function needs a rising time for each of two or more samples")
    sample_s = float(np.median(np.diff(times)))
    if log_rate_var is None:
        one, two = (_raw(rates, times, lag, sample_s) for lag in (sample_s, 2 * sample_s))
        floor = max(0.0, 2 * one - two) if np.isfinite(two) else 0.0
        return np.array([_raw(rates, times, lag, sample_s) - floor for lag in lags])
    noise = np.broadcast_to(np.asarray(log_rate_var, float), rates.shape)
    return np.array([_raw(rates, times, lag, sample_s, noise) for lag in lags])


def _raw(
    log_rate: FloatArray, time_s: FloatArray, lag_s: float, sample_s: float, noise: FloatArray | None = None
) -> float:
    """Return the mean squared difference at a lag, less the noise of both samples."""
    first, second = _pairs(time_s, lag_s, sample_s)
    if not len(first):
        return float("nan")
    squares = (log_rate[second] - log_rate[first]) ** 2
    return float(np.mean(squares if noise is None else squares - noise[first] - noise[second]))


def _pairs(time_s: FloatArray, lag_s: float, sample_s: float) -> tuple[IntArray, IntArray]:
    """Return the indices of all pairs of samples a lag apart, nearest neighbour, within half a sample."""
    wanted = time_s + lag_s
    after = np.clip(np.searchsorted(time_s, wanted), 1, len(time_s) - 1)
    nearest = after - (wanted - time_s[after - 1] < time_s[after] - wanted)
    first = np.flatnonzero(
        (np.abs(time_s[nearest] - wanted) < sample_s / 2) & (nearest > np.arange(len(time_s)))
    )
    return first, nearest[first]
