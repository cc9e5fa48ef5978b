"""Crossings: the dead time behind the counts of two slits where their light adds up without interference.

Where two slits are out of step by one or three quarters of a turn, what is missing when both are open is what
the dead time has taken. An error of the place cancels between the crossings on both sides of the pair's
middle, one of the scale between the near and the far ones.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import sqrt

import numpy as np
from scipy.optimize import brentq

from daq.description import Rig
from daq.estimate.arrays import FloatArray
from daq.estimate.counting import true_rate_hz
from daq.tasks.refusals import hopeless

NAME = "deadtime"
MOST_LOSS = 0.2
NONE, A, B, AB = 0, 1, 2, 3
MISSING = np.array([-1.0, 1.0, 1.0, -1.0])


@dataclass(frozen=True, slots=True)
class Sums:
    """A dead time by sums and its standard error [s], and what every cycle says by itself [s]."""

    tau_s: float
    se_s: float
    by_cycle_s: FloatArray


def crossings_mm(rig: Rig) -> tuple[float, ...]:
    """Return where A and B are one or three quarters of a turn out of step: near, then far [mm]."""
    a, b = rig.slits["A"].centre_m, rig.slits["B"].centre_m
    quarter_m = rig.geometry.wavelength_m * rig.geometry.distance_m / (4 * abs(b - a))
    middle_m = (a + b) / 2
    return tuple(1e3 * (middle_m + turns * quarter_m) for turns in (-1, 1, -3, 3))


def dead_time_of_cycles(cycles: FloatArray, kind: str) -> Sums:
    """Return the dead time that makes the rates of none, A, B and AB add up, by cycle and crossing (C, 4, 4).

    Notes
    -----
    Its error is the scatter of the cycles, crossing by crossing, over the slope of what is missing: it holds
    what the source does between the visits of a cycle, too. Where that does nothing and one crossing is
    counted, it is sqrt((a + b + ab)/T)/(2 a b), with the rates of A, B and AB and the live time of each.

    Raises
    ------
    DaqError
        When no dead time does.
    """
    mean = cycles.mean(axis=0)
    weight = _weights(mean)
    tau = _solved(mean, weight, kind)
    by_crossing = _missing(cycles, tau, kind) * weight
    u_hz = sqrt(float(by_crossing.var(axis=0, ddof=1).sum()) / len(cycles))
    slope_hz2 = float(weight @ (_slope(mean, tau, kind) @ MISSING))
    return Sums(tau, u_hz / abs(slope_hz2), tau - by_crossing.sum(axis=1) / slope_hz2)


def _weights(seen: FloatArray) -> FloatArray:
    """Return the weight of every crossing, so that a wrong scale drops out.

    A scale that is off by a small angle d a quarter adds -g d near and +3 g d far, g twice the root of both
    slits' rates: the far sum counts g_near / (3 g_far) times.
    """
    alone = [np.clip(seen[:, slit] - seen[:, NONE], 0, None) for slit in (A, B)]
    light = np.sqrt(alone[0] * alone[1])
    near, far = light[:2].mean(), light[2:].mean()
    if not far > 0:
        raise hopeless(NAME, "a slit alone counts no more than none", "Look for the light of A and B")
    return np.repeat([1.0, near / (3 * far)], 2)


def _solved(seen: FloatArray, weight: FloatArray, kind: str) -> float:
    def missing(tau: float) -> float:
        return float(weight @ _missing(seen, tau, kind))

    most = MOST_LOSS / float(seen.max())
    if missing(-most) * missing(most) > 0:
        raise hopeless(
            NAME,
            "no dead time makes the counts of two slits add up: the fit does not converge",
            "Look at the place of the detector and the geometry of the rig, then repeat",
        )
    return float(brentq(missing, -most, most, xtol=1e-16))


def _missing(seen: FloatArray, tau: float, kind: str) -> FloatArray:
    """Return what both slits together fall short of each alone; a dead time below zero to first order."""
    true = true_rate_hz(seen, abs(tau), kind)
    return np.asarray((true if tau >= 0 else 2 * seen - true) @ MISSING)


def _slope(seen: FloatArray, tau: float, kind: str) -> FloatArray:
    """Return how the true rates grow with the dead time [1/s2]."""
    true = true_rate_hz(seen, abs(tau), kind)
    return np.asarray(true**2 if kind == "non-paralysable" else true**2 / (1 - true * abs(tau)))
