"""Counting: what dead time does to rates and variances, and exact limits for few counts."""

from __future__ import annotations

from math import isfinite
from typing import Any

import numpy as np
from scipy.special import betainc, gammainccinv, gammaincinv, lambertw

from daq.estimate.arrays import FloatArray

KINDS = ("non-paralysable", "paralysable")


def scatter(value: FloatArray, variance: FloatArray, fano: float, heralded: bool) -> float:
    """Return variance over mean of counts that rules compare as Poisson counts.

    The Fano factor; where accidental coincidences were taken away, what they left in the variance too.
    """
    total = float(value.sum())
    return float(variance.sum()) / total if heralded and total > 0 else fano


def true_rate_hz(seen_hz: Any, dead_time_s: float, kind: str) -> Any:
    """Return the true rate behind a recorded one [1/s].

    Parameters
    ----------
    seen_hz
        Recorded rates [1/s], any shape.
    kind
        "non-paralysable" or "paralysable"; for the latter the lower of the two rates that fit.

    Raises
    ------
    ValueError
        For a recorded rate that no true rate gives, or a negative one.

    References
    ----------
    .. [1] "Radiation Detection and Measurement", 4th ed., ch. 4 (dead-time models); the inverse by the
       principal branch of the Lambert W function.
    """
    check_dead_time(dead_time_s, kind)
    seen = np.asarray(seen_hz, float)
    lost = ~(seen >= 0) | ~within_range(seen, dead_time_s, kind)
    if lost.any():
        raise ValueError(
            f"a recorded rate of {seen[lost].flat[0]:g} 1/s is out of range for a {kind} dead time "
            f"of {dead_time_s:g} s"
        )
    return _true(seen, dead_time_s, kind)[()]


def seen_rate_hz(true_hz: Any, dead_time_s: float, kind: str) -> Any:
    """Return the rate that is recorded of a true one [1/s].

    References
    ----------
    .. [1] "Radiation Detection and Measurement", 4th ed., ch. 4 (dead-time models).
    """
    check_dead_time(dead_time_s, kind)
    true = np.asarray(true_hz, float)
    x = true * dead_time_s
    return (true / (1 + x) if kind == "non-paralysable" else true * np.exp(-x))[()]


def within_range(seen_hz: Any, dead_time_s: float, kind: str) -> Any:
    """Return whether a recorded rate lies below what a counter with this dead time can record at most."""
    most = 1.0 if kind == "non-paralysable" else np.exp(-1.0)
    finite = np.isfinite(seen_hz)
    return finite & (np.where(finite, seen_hz, 0.0) * dead_time_s < most)


def check_dead_time(dead_time_s: float, kind: str) -> None:
    """Raise ValueError for a dead time that no counter has."""
    if not (isfinite(dead_time_s) and dead_time_s >= 0):
        raise ValueError(f"a dead time must not be below zero, not {dead_time_s:g} s")
    if kind not in KINDS:
        raise ValueError(f"the kind of dead time must be one of {', '.join(KINDS)}, not {kind!r}")


def true_counts(
    values: FloatArray,
    live_s: FloatArray,
    values_var: FloatArray,
    dead_time_s: float,
    kind: str,
    fano: float = 1.0,
) -> tuple[FloatArray, FloatArray]:
    """Return the counts without dead-time losses, and their variance.

    Parameters
    ----------
    values, live_s
        Recorded counts and live time [s] by visit; rates within range.
    values_var
        Variance of the recorded counts; NaN means a Poisson source behind the dead time.
    fano
        Variance of such counts over that of a Poisson source.

    Notes
    -----
    With x = true rate times dead time the recorded counts of a Poisson source vary by n T/(1+x)^3
    (non-paralysable) or m T (1 - 2 x exp(-x)) (paralysable), less than by themselves; the correction
    multiplies a deviation by dn/dm. Both hold for live times much longer than the dead time.

    References
    ----------
    .. [1] "Radiation Detection and Measurement", 4th ed., ch. 4 (dead-time models); renewal theory for the
       variances, from memory, checked by simulation in the tests.
    """
    seen = values / live_s
    true = _true(seen, dead_time_s, kind)
    x = true * dead_time_s
    if kind == "non-paralysable":
        slope, narrowed = (1 + x) ** 2, (1 + x) ** -2
    else:
        slope, narrowed = np.exp(x) / (1 - x), 1 - 2 * x * np.exp(-x)
    spread = np.where(np.isnan(values_var), values * fano * narrowed, values_var)
    return true * live_s, spread * slope**2


def dead_time_two_source_s(first_hz: float, second_hz: float, both_hz: float, background_hz: float) -> float:
    """Return the non-paralysable dead time from two sources counted apart and together [s].

    Parameters
    ----------
    first_hz, second_hz, both_hz, background_hz
        Recorded rates [1/s], background included in each.

    Raises
    ------
    ValueError
        If the rates fit no dead time. Noise may make a short one come out below zero.

    References
    ----------
    .. [1] "Radiation Detection and Measurement", 4th ed., ch. 4, two-source method with background, exact.
    """
    x = first_hz * second_hz - background_hz * both_hz
    y = first_hz * second_hz * (both_hz + background_hz) - background_hz * both_hz * (first_hz + second_hz)
    z = y * (first_hz + second_hz - both_hz - background_hz) / x**2 if x else np.inf
    # Both together must be more than each alone: where they are not, the formula gives 1/rate, saturation.
    if y == 0 or not z <= 1 or not both_hz > max(first_hz, second_hz):
        raise ValueError(
            f"the rates {first_hz:g}, {second_hz:g}, {both_hz:g} and {background_hz:g} 1/s fit no dead time"
        )
    return x * (1 - float(np.sqrt(1 - z))) / y


def poisson_interval(counts: int, confidence: float) -> tuple[float, float]:
    """Return the exact two-sided limits of a Poisson mean.

    References
    ----------
    .. [1] "Fiducial limits for the Poisson distribution", Biometrika 28, 437 (1936).
    """
    if counts < 0 or counts != int(counts):
        raise ValueError(f"counts must be a whole number from 0 up, not {counts}")
    if not 0 < confidence < 1:
        raise ValueError(f"the confidence must lie between 0 and 1, not {confidence}")
    tail = (1 - confidence) / 2
    low = float(gammaincinv(counts, tail)) if counts else 0.0
    return low, float(gammainccinv(counts + 1, tail))


def chance_of_more(counts: float, live_s: float, dark: float, dark_s: float) -> float:
    """Return how probable so many counts or more are beside dark ones where both come at one rate.

    Notes
    -----
    Exact, also of few counts: of all counts together each is one of `counts` with the probability of its live
    time. The threshold of few counts that a normal law gives is too low.

    References
    ----------
    .. [1] "Applied Modeling and Computations in Nuclear Science", ACS Symposium (2006), for the smallest
       pairs; the rest is the binomial law.
    """
    return float(betainc(counts, dark + 1, live_s / (live_s + dark_s))) if counts > 0 else 1.0


def _true(seen: FloatArray, dead_time_s: float, kind: str) -> FloatArray:
    if dead_time_s == 0:
        return seen
    if kind == "non-paralysable":
        return seen / (1 - seen * dead_time_s)
    return -np.real(lambertw(-seen * dead_time_s)) / dead_time_s
