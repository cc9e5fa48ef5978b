"""Deadtime: how long the counter is blind after a count, from two slits alone and together.

Where two slits are out of step by one or three quarters of a turn their light adds up without interference;
what is missing when both are open is what the dead time has taken. An error of the place cancels between the
crossings on both sides of the pair's middle, one of the scale between the near and the far ones.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import sqrt

import numpy as np
from scipy.optimize import brentq

from daq.description import Rig
from daq.estimate.arrays import FloatArray
from daq.estimate.counting import true_rate_hz
from daq.tasks.contract import (
    Ask,
    Curve,
    Outcome,
    Panel,
    Setting,
    Taken,
    Task,
    Verdict,
    counts_only,
    hopeless,
    within,
    worst,
)

DWELL_S, CYCLES = 10.0, 8
LARGEST_LOSS, MOST_LOSS = 0.05, 0.2
NONE, A, B, AB = 0, 1, 2, 3
MISSING = np.array([-1.0, 1.0, 1.0, -1.0])
ORDER = (NONE, A, AB, B, B, AB, A, NONE)  # and back: a straight drift cancels
NAME = "deadtime"


def crossings_mm(rig: Rig) -> tuple[float, ...]:
    """Return where A and B are one or three quarters of a turn out of step: near, then far [mm]."""
    a, b = rig.slits["A"].centre_m, rig.slits["B"].centre_m
    quarter_m = rig.geometry.wavelength_m * rig.geometry.distance_m / (4 * abs(b - a))
    middle_m = (a + b) / 2
    return tuple(1e3 * (middle_m + turns * quarter_m) for turns in (-1, 1, -3, 3))


def dead_time_of_sums(rates: FloatArray, kind: str) -> float:
    """Return the dead time that makes the rates of none, A, B and AB at the four crossings (4, 4) add up [s].

    Notes
    -----
    A scale that is wrong by a small angle d per quarter adds -g d near and +3 g d far, g twice the root of
    both slits' rates: the far sum counts g_near / (3 g_far) times, and d drops out.

    Raises
    ------
    DaqError
        When no dead time does.
    """
    seen = np.asarray(rates, float)
    light = np.sqrt(
        np.clip(seen[:, A] - seen[:, NONE], 0, None) * np.clip(seen[:, B] - seen[:, NONE], 0, None)
    )
    near, far = light[:2].mean(), light[2:].mean()
    if not far > 0:
        raise hopeless(NAME, "a slit alone counts no more than none", "Look for the light of A and B")
    weight = np.repeat([1.0, near / (3 * far)], 2)

    def missing(tau: float) -> float:
        """Return what both together fall short of each alone; below zero to first order."""
        true = true_rate_hz(seen, abs(tau), kind)
        true = true if tau >= 0 else 2 * seen - true
        return float(weight @ (true @ MISSING))

    most = MOST_LOSS / float(seen.max())
    if missing(-most) * missing(most) > 0:
        raise hopeless(
            NAME,
            "no dead time makes the counts of two slits add up: the fit does not converge",
            "Look at the place of the detector and the geometry of the rig, then repeat",
        )
    return float(brentq(missing, -most, most, xtol=1e-16))


def dead_time_of_gaps(gaps_s: FloatArray) -> tuple[float, float]:
    """Return the dead time from the gaps between events of an even rate, and its standard error [s].

    Notes
    -----
    The smallest of N gaps lies above the dead time by 1/(nN) on average, with that scatter; n is the rate of
    arrivals, from the mean gap above the smallest. A sharp edge is taken for granted: a detector that
    rings or is read with jitter has none.
    """
    least = float(np.min(gaps_s))
    above = float(np.mean(gaps_s)) - least
    return least - above / len(gaps_s), above / len(gaps_s)


def _asks(setting: Setting, taken: Sequence[Taken]) -> Sequence[Ask]:
    if taken:
        return ()
    places = crossings_mm(setting.rig)
    return [
        Ask(f"{at} {cycle}", DWELL_S, place, opening)
        for cycle in range(CYCLES)
        for at, place in enumerate(places)
        for opening in ORDER
    ]


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    kind = setting.measurement.estimate.dead_time_kind
    cycles = _rates(taken)
    tau = dead_time_of_sums(cycles.mean(axis=0), kind)
    left_out = [
        dead_time_of_sums(np.delete(cycles, at, axis=0).mean(axis=0), kind) for at in range(len(cycles))
    ]
    count = len(cycles)
    se = sqrt((count - 1) / count * float(np.sum((np.array(left_out) - np.mean(left_out)) ** 2)))
    top_hz = setting.yardstick.brightest_hz
    shift = abs(setting.yardstick.per_dead_time) * se
    verdict = worst(within(top_hz * abs(tau), top_hz * se, LARGEST_LOSS), _allowed(shift, setting))
    told = setting.measurement.estimate.dead_time_s
    return Outcome(
        values={
            "dead_time_s": tau,
            "largest_loss": top_hz * tau,
            "kappa_shift": shift,
            "described_s": told,
            "away_in_se": (tau - told) / se,
        },
        se={"dead_time_s": se, "largest_loss": top_hz * se},
        verdict=worst(verdict, "pass" if abs(tau - told) <= 3 * se else "doubtful"),
        sentence=(
            f"The dead time is {1e9 * tau:.3g} +- {1e9 * se:.2g} ns ({1e9 * told:.3g} described); its error "
            f"moves kappa by {_tiny(shift, setting)}, and at the brightest "
            f"place {100 * top_hz * tau:.2g} % of the counts are lost."
        ),
        model=f"two slits alone and together, {kind}",
        panels=(_panel(cycles, kind, tau),),
    )


def _tiny(shift: float, setting: Setting) -> str:
    allowed = setting.yardstick.allowed
    least = 1e-3 * allowed
    return f"less than {least:.0e}" if shift < least else f"{shift:.1e} of {allowed:.1e} allowed"


def _allowed(shift: float, setting: Setting) -> Verdict:
    return "pass" if shift <= setting.yardstick.allowed else "fail"


def _rates(taken: Sequence[Taken]) -> FloatArray:
    """Return rates by cycle, crossing and opening (C, 4, 4) [1/s]."""
    value, live = np.zeros((2, CYCLES, 4, 4))
    for ask, reading in taken:
        at, cycle = map(int, ask.role.split())
        value[cycle, at, ask.opening] += reading.values[0]
        live[cycle, at, ask.opening] += reading.live_s
    return np.asarray(value / live)


def _panel(cycles: FloatArray, kind: str, tau: float) -> Panel:
    at = np.arange(1.0, len(cycles) + 1)
    each = np.array([dead_time_of_sums(cycle, kind) for cycle in cycles]) * 1e9
    return Panel(
        "Dead time of every cycle, all crossings together",
        "cycle",
        "dead time [ns]",
        (Curve(at, each, "one cycle"), Curve(at, np.full(len(at), tau * 1e9), "all together", line=True)),
    )


TASK = Task(
    name=NAME,
    purpose="How long the counter is blind after a count, from two slits alone and together.",
    days=90,
    holds_for=("devices",),
    lacks=counts_only,
    asks=_asks,
    fit=_fit,
)
