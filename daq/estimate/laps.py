"""Laps: what whole laps show that no stand can, as sentences; nothing is left out for it."""

from __future__ import annotations

from collections.abc import Sequence
from math import sqrt

import numpy as np

from daq import openings
from daq.estimate.arrays import FloatArray
from daq.estimate.labels import taken_for
from daq.estimate.medians import RunningMedian
from daq.estimate.plan import Plan
from daq.estimate.quality import Rules, fingerprint

LAPS_TO_SCALE = 6  # from here the night's own median counts
DARK_ROUNDS = 4  # of finding dark counts and the source's strength from each other: both settle at once


class Laps:
    """Gathers stands and slices lap by lap, and says what a lap shows once it is over."""

    def __init__(self, plan: Plan, rules: Rules, expected_hz: FloatArray | None) -> None:
        self._plan, self._rules, self._expected_hz = plan, rules, expected_hz
        shape = (len(plan.positions_mm), len(plan.openings))
        self._counts, self._exposure = np.zeros(shape), np.zeros(shape)
        self._earlier, self._earlier_exposure = np.zeros(shape[1]), np.zeros(shape[1])
        self._first, self._whole = np.zeros(shape[1]), np.zeros(shape[1])
        self._slices, self._lap = 1, 0
        self._spread = RunningMedian(LAPS_TO_SCALE)
        self.labels = ""  # what the lap that just ended says of its openings

    def stand(self, position: int, counts: FloatArray, exposure: FloatArray) -> None:
        """Take in a stand that is kept: corrected counts and live seconds by opening."""
        self._counts[position] += counts
        self._exposure[position] += exposure

    def slices(self, opening: int, counts: Sequence[float]) -> None:
        """Take in the slices of a visit."""
        self._slices = len(counts)
        self._first[opening] += counts[0]
        self._whole[opening] += sum(counts)

    def begins(self, stand: int) -> list[str]:
        """Return what the lap before shows when a stand is the first of another one."""
        lap, self.labels = stand // len(self._plan.positions_mm), ""
        if lap == self._lap:
            return []
        self.labels = self._labels()
        found = [*self._settling(), *self._fit()]
        self._lap = lap
        for table in (self._counts, self._exposure, self._first, self._whole):
            table[:] = 0
        return found

    def _labels(self) -> str:
        """Return which openings of the first lap look like others; nothing where none does."""
        if self._lap or self._expected_hz is None or not (self._exposure > 0).all():
            return ""
        odd = taken_for(self._counts, self._expected_hz * self._exposure)
        pairs = ", ".join(f"{self._name(one)} looks like {self._name(other)}" for one, other in odd.items())
        return f"The patterns of the first lap fit much better with other labels: {pairs}." if odd else ""

    def _settling(self) -> list[str]:
        """Return the openings whose first slice differs from the others."""
        share, found = 1 / self._slices, []
        for opening in np.flatnonzero(self._whole).tolist() if self._slices > 1 else ():
            due = self._whole[opening] * share
            apart = self._first[opening] - due
            if abs(apart) > self._rules.settle_sigma * sqrt(due * (1 - share)):
                found.append(
                    f"In lap {self._lap + 1} the first slice of {self._name(opening)} holds "
                    f"{100 * apart / due:+.2g} % of counts against the others: "
                    "look whether the mask has settled when the gate opens."
                )
        return found

    def _fit(self) -> list[str]:
        """Return whether a whole lap fits the earlier ones; those that do are added up."""
        if not (self._exposure > 0).all():
            return []
        counts, exposure = self._counts.sum(axis=0), self._exposure.sum(axis=0)
        match = fingerprint(
            counts, self._as_the_source(counts, exposure), self._earlier, self._earlier_exposure
        )
        odd, found = match.beyond(self._rules.lap_p, self._spread.scale), []
        if odd:
            ratio = counts / exposure * self._earlier_exposure / self._earlier
            size = ratio[match.worst] / (counts.sum() / (self._earlier @ (exposure / self._earlier_exposure)))
            found = [
                f"Lap {self._lap + 1} does not fit the laps before; opening {self._name(match.worst)} "
                f"stands out by {100 * (size - 1):+.2g} %."
            ]
        elif match.dof:
            self._spread.add(match.ratio)
        self._earlier += counts
        self._earlier_exposure += exposure
        return found

    def _as_the_source(self, counts: FloatArray, exposure: FloatArray) -> FloatArray:
        """Return exposures with which a lap compares as if all that it counts followed the source.

        Dark counts do not: as the source falls, every opening falls less than the light, `none` least of all.
        How many of the counts of `none` are dark is read from them; from none to all of them may be.
        """
        if not self._earlier.all() or self._plan.openings[0]:
            return exposure
        rate_hz, dark_hz, strength = self._earlier / self._earlier_exposure, 0.0, 1.0
        for _ in range(DARK_ROUNDS):
            light = float(counts.sum() - dark_hz * exposure.sum())
            strength = light / float((rate_hz - dark_hz) @ exposure)
            if strength in (0.0, 1.0):
                return exposure
            apart_hz = float(counts[0] / exposure[0] - strength * rate_hz[0])
            dark_hz = min(max(apart_hz / (1 - strength), 0.0), float(rate_hz[0]))
        return np.asarray(exposure * (1 + (1 - strength) * dark_hz / (strength * rate_hz)))

    def _name(self, opening: int) -> str:
        return openings.name(int(self._plan.openings[opening]))
