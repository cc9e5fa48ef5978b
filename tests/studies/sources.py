"""Sources: how the strength of a simulated source changes over a night, for many nights at once."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from daq.estimate.arrays import FloatArray

HOUR_S = 3600.0

Source = Callable[[FloatArray, int, np.random.Generator], FloatArray]


def _steady(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    return np.ones((nights, len(time_s)))


def _linear(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    """Fall by 3 % an hour."""
    return np.broadcast_to(1 - 0.03 * time_s / HOUR_S, (nights, len(time_s)))


def _quadratic(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    share = time_s / time_s[-1]
    return np.broadcast_to(1 - 0.1 * share - 0.2 * share**2, (nights, len(time_s)))


def _exponential(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    """Fall by 20 % with a time constant of an hour."""
    return np.broadcast_to(1 - 0.2 * -np.expm1(-time_s / HOUR_S), (nights, len(time_s)))


def walk(per_sqrt_hour: float) -> Source:
    """Return a random walk of the logarithm."""

    def strength(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
        step = per_sqrt_hour * np.sqrt(np.diff(time_s, prepend=0.0) / HOUR_S)
        return np.exp(np.cumsum(step * generator.standard_normal((nights, len(time_s))), axis=1))

    return strength


def sine(minutes: float, amplitude: float = 0.02) -> Source:
    """Return a ripple of random phase."""

    def strength(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
        phase = generator.uniform(0, 2 * np.pi, (nights, 1))
        return np.asarray(1 + amplitude * np.sin(2 * np.pi * time_s / (60 * minutes) + phase))

    return strength


def steps(size: float = 0.02) -> Source:
    """Return jumps at random times, one an hour on average, normal in size."""

    def strength(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
        chance = np.diff(time_s, prepend=0.0) / HOUR_S
        jumps = generator.random((nights, len(time_s))) < chance
        return np.exp(np.cumsum(jumps * size * generator.standard_normal(jumps.shape), axis=1))

    return strength


def _flicker(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    """Ten relaxing processes of 0.5 % each, relaxation times from 3 s to 10 000 s."""
    log = np.zeros((nights, len(time_s)))
    gap_s = np.diff(time_s)
    for relax_s in np.geomspace(3.0, 1e4, 10):
        keep = np.exp(-gap_s / relax_s)
        state = 0.005 * generator.standard_normal(nights)
        log[:, 0] += state
        for at, kept in enumerate(keep, start=1):
            state = kept * state + 0.005 * np.sqrt(1 - kept**2) * generator.standard_normal(nights)
            log[:, at] += state
    return np.exp(log)


def _mix(time_s: FloatArray, nights: int, generator: np.random.Generator) -> FloatArray:
    parts = (_linear, walk(0.015), sine(30), steps(0.01))
    return np.asarray(np.prod([part(time_s, nights, generator) for part in parts], axis=0))


SOURCES: dict[str, Source] = {
    "none": _steady,
    "linear": _linear,
    "quadratic": _quadratic,
    "exponential": _exponential,
    "random walk": walk(0.03),
    "sine 20 min": sine(20),
    "sine 60 min": sine(60),
    "sine 180 min": sine(180),
    "steps": steps(),
    "mix": _mix,
    "flicker": _flicker,
}

# Variance per hour of the random walk with the same second moments; no entry: a smooth source, for which the
# bound is that of counting at the strength it has.
WALK_PER_HOUR = {"random walk": 0.03**2, "steps": 0.02**2, "mix": 0.015**2 + 0.01**2}
