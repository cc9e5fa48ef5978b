"""Pilot: from a source's rate, watched for a while, to a model of how it wanders."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike
from scipy.optimize import nnls

from daq.description import Measurement
from daq.itinerary.orders import FloatArray
from daq.itinerary.wander import Wander

HOUR_S = 3600.0
LOWEST = 4  # bins of the spectrum below it are left to ramps and slow lines, which the order cancels
FALSE_LINE = 1e-3  # chance of a line where there is none, over the whole spectrum
_WALKS = np.concatenate([[0.0], np.geomspace(1e-12, 1e-5, 43)])  # per sample
_VARIANCES = np.geomspace(1e-8, 1e-4, 9)


@dataclass(frozen=True, slots=True)
class Ripple:
    """A periodic line: period and its uncertainty [s], relative amplitude (0: not known)."""

    period_s: float
    period_u_s: float = 0.0
    amplitude: float = 0.0


@dataclass(frozen=True, slots=True)
class _Spectrum:
    """Power of the steps of the log rate by frequency [per sample], what counting gives, and the gain."""

    frequency: FloatArray
    power: FloatArray
    counting: FloatArray
    samples: int
    line_gain: float

    def without(self, bins: FloatArray) -> _Spectrum:
        keep = np.ones(len(self.power), bool)
        keep[[int(at) for bin_ in bins for at in (bin_ - 1, bin_, bin_ + 1) if 0 <= at < len(keep)]] = False
        return _Spectrum(
            self.frequency[keep], self.power[keep], self.counting[keep], self.samples, self.line_gain
        )


def wander_of(measurement: Measurement) -> tuple[Wander, tuple[Ripple, ...]]:
    """Return how the source is expected to wander, and every line that is known.

    From the pilot where there is one, else from [expect]; lines from both.
    """
    expect, pilot = measurement.expect, measurement.pilot
    ripples = tuple(Ripple(line.period_s, line.period_u_s, line.amplitude) for line in expect.lines)
    if pilot is None:
        relaxing = tuple((part.sd**2, part.time_s) for part in expect.relaxing)
        found = Wander(expect.drift_per_sqrt_hour**2 / HOUR_S, 0.0, relaxing)
    elif pilot.counts is None:
        found = wander_of_structure(pilot.lags_s or (), pilot.structure or ())
    else:
        found, seen = wander_of_counts(pilot.counts, pilot.sample_s)
        ripples += seen
    lines = tuple((ripple.amplitude, ripple.period_s) for ripple in ripples if ripple.amplitude)
    return replace(found, lines=lines), ripples


def wander_of_structure(lags_s: ArrayLike, structure: ArrayLike) -> Wander:
    """Return the sum of simple parts that comes closest to a structure function, relative error for error.

    Notes
    -----
    Non-negative least squares on {l, l^2, 1 - exp(-l/T)}, T over the range of the lags, two a decade.
    """
    lags, values = np.asarray(lags_s, float), np.asarray(structure, float)
    times_s = _times(lags.min(), lags.max())
    parts = np.stack([lags, lags**2, *(2 * -np.expm1(-lags / time_s) for time_s in times_s)], axis=1)
    scale = np.maximum(values, 1e-3 * values.max(initial=1e-30))
    weighed = parts / scale[:, None]
    norm = np.linalg.norm(weighed, axis=0)
    found = nnls(weighed / norm, values / scale)[0] / norm
    return Wander(float(found[0]), float(found[1]), _relaxing(found[2:], times_s))


def wander_of_counts(counts: ArrayLike, sample_s: float) -> tuple[Wander, tuple[Ripple, ...]]:
    """Return how a source wandered whose counts, one sample after another, are given, and its lines.

    Notes
    -----
    The mean over all models (random walk plus one relaxing part, on a grid), each as likely as the spectrum
    of the tapered steps of the log rate makes it (Whittle's likelihood). A plan that is best for the mean of
    D has the least expected loss, because the variance of kappa is linear in D.

    References
    ----------
    .. [1] "Estimation and information in stationary time series", Ark. Mat. 2, 423 (1953), from memory.
    """
    spectrum = _spectrum(np.asarray(counts, float))
    level, wander = _mean_model(spectrum)
    ratio = spectrum.power / level
    high = np.flatnonzero(ratio > -np.log(FALSE_LINE / len(ratio)))
    peaks = np.array([at for at in high if ratio[at] == ratio[max(at - 2, 0) : at + 3].max()])
    ripples = tuple(_ripple(spectrum, int(at), float(ratio[at]), sample_s) for at in peaks)
    if ripples:
        _, wander = _mean_model(spectrum.without(peaks))
    relaxing = tuple((var, time * sample_s) for var, time in wander.relaxing)
    return Wander(wander.walk_per_s / sample_s, 0.0, relaxing), ripples


def _spectrum(counts: FloatArray) -> _Spectrum:
    steps = np.diff(np.log(counts))
    taper = np.sin(np.pi * (np.arange(len(steps)) + 0.5) / len(steps))
    power = np.asarray(np.abs(np.fft.rfft((steps - steps.mean()) * taper)) ** 2 / (taper**2).sum(), float)
    frequency = np.asarray(np.fft.rfftfreq(len(steps)), float)
    counting = _step_gain(frequency) / counts.mean()
    kept = slice(LOWEST, None)
    gain = float(taper.sum() ** 2 / (taper**2).sum())
    return _Spectrum(frequency[kept], power[kept], counting[kept], len(counts), gain)


def _mean_model(spectrum: _Spectrum) -> tuple[FloatArray, Wander]:
    """Return the mean spectrum over all models, and the mean wander (times in samples)."""
    times = _times(1.0, spectrum.samples / 5)
    cases = [(0.0, 1.0), *((var, time) for time in times for var in _VARIANCES)]
    likely = np.array([_log_likelihoods(spectrum, var, time) for var, time in cases])
    likely[1:] -= np.log(len(cases))
    share = np.exp(likely - likely.max())
    share /= share.sum()
    by_case = share.sum(axis=1)
    walk = float(share.sum(axis=0) @ _WALKS)
    variance = [
        sum(part * var for part, (var, at) in zip(by_case, cases, strict=True) if at == time and var)
        for time in times
    ]
    level = spectrum.counting + walk
    level = level + sum(_relaxed(spectrum, var, time) for var, time in zip(variance, times, strict=True))
    return level, Wander(walk, 0.0, _relaxing(np.array(variance), times))


def _log_likelihoods(spectrum: _Spectrum, variance: float, time: float) -> FloatArray:
    """Return the log likelihood of every walk beside one relaxing part."""
    level = spectrum.counting + _relaxed(spectrum, variance, time) + _WALKS[:, None]
    return np.asarray(-(np.log(level) + spectrum.power / level).sum(axis=1))


def _relaxed(spectrum: _Spectrum, variance: float, time: float) -> FloatArray:
    kept = np.exp(-1 / time)
    cosine = np.cos(2 * np.pi * spectrum.frequency)
    return np.asarray(
        variance * _step_gain(spectrum.frequency) * (1 - kept**2) / (1 - 2 * kept * cosine + kept**2)
    )


def _ripple(spectrum: _Spectrum, at: int, ratio: float, sample_s: float) -> Ripple:
    """Return the line of a peak, its frequency to a part of a bin (a parabola through three logarithms)."""
    bin_width = 1 / (spectrum.samples - 1)
    low, here, high = np.log(spectrum.power[[max(at - 1, 0), at, min(at + 1, len(spectrum.power) - 1)]])
    bend = low - 2 * here + high
    off = float(np.clip((low - high) / (2 * bend), -0.5, 0.5)) if bend < 0 else 0.0
    frequency = float(spectrum.frequency[at]) + off * bin_width
    size = np.sqrt(4 * spectrum.power[at] / spectrum.line_gain / _step_gain(frequency))
    period = 1 / frequency
    uncertainty_s = period**2 * bin_width / float(np.sqrt(ratio)) * sample_s
    return Ripple(period * sample_s, uncertainty_s, float(size))


def _step_gain(frequency: FloatArray | float) -> FloatArray:
    """Return what taking steps does to the power at a frequency [per sample]."""
    return np.asarray(4 * np.sin(np.pi * np.asarray(frequency)) ** 2)


def _times(least: float, most: float) -> FloatArray:
    decades = np.log10(most / least)
    return np.geomspace(least, most, 1 + max(1, round(2 * decades))) if decades > 0 else np.array([least])


def _relaxing(variance: FloatArray, times: FloatArray) -> tuple[tuple[float, float], ...]:
    return tuple((float(var), float(time)) for var, time in zip(variance, times, strict=True) if var > 0)
