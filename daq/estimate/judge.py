"""Judge: the quality rules applied as readings come home, before they are stored; the same again off line."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import inf, log, sqrt

import numpy as np

from daq import openings as names
from daq.estimate.arrays import FloatArray, added
from daq.estimate.counting import scatter
from daq.estimate.detected import Detected, detected
from daq.estimate.laps import Laps
from daq.estimate.medians import RunningMedian
from daq.estimate.plan import Plan
from daq.estimate.quality import (
    Rules,
    clock_bits,
    counter_bits,
    dispersion,
    fingerprint,
    sensor_bits,
)
from daq.estimate.rows import rows_of_readings
from daq.records import EXCLUDING, Quality, Reading

SPOILT = int(EXCLUDING & ~Quality.FINGERPRINT)
STANDS_TO_SCALE = 20  # from here the night's own median counts
STRAYED = 3  # stands in a row outside the band of the rate, before a sentence is said
TO_SIGMA = 1.4826  # median absolute deviation of a normal distribution


@dataclass(slots=True)
class _Place:
    """What is known of one position: kept counts and exposures by opening, the monitor, the last refused."""

    counts: FloatArray
    exposure: FloatArray
    stands: int = 0
    light: float = 0.0
    first_hz: FloatArray | None = None
    refused: tuple[FloatArray, FloatArray] | None = None


class Judge:
    """Applies the rules to the readings of a run in their order.

    `finding` is why the last one's stand is left out, if it says so; `notes` what else it showed; `labels`
    that the openings of the first lap look like others.
    """

    def __init__(self, plan: Plan, rules: Rules, expected_hz: FloatArray | None = None) -> None:
        self._plan, self._expected_hz = plan, expected_hz
        self.rules, self.whole_stand = rules, plan.whole_stand
        self._places: dict[int, _Place] = {}
        self._stand: tuple[int, int] | None = None  # whose visits come in now, and at which attempt
        self._attempt: list[Reading] = []
        self._before: Reading | None = None
        self._sliced, self._stood, self._lit = (RunningMedian(STANDS_TO_SCALE) for _ in range(3))
        self._laps, self._strayed = Laps(plan, rules, expected_hz), 0
        self.finding: str | None = None
        self.notes: list[str] = []
        self.labels = ""
        self.odd = ""  # the opening that stood out in the last reading's stand
        self.stand_quality = Quality.GOOD  # of the whole stand that the last reading belongs to, so far

    def judge(self, reading: Reading) -> Reading:
        """Return a reading with the bits that the rules add to its quality."""
        self.finding, self.odd, self.notes = None, "", []
        quality = reading.quality | clock_bits(self._before, reading, self.rules)
        quality |= sensor_bits(reading, self.rules)
        if reading.visit >= 0 and self._plan.counting == "counts":
            quality |= counter_bits(reading, self.rules, self._due(reading))
            quality |= self._sliced_bits(reading)
        judged = _with(reading, quality)
        attempt = self._gathered(judged)
        if len(attempt) == self._plan.whole_stand:
            judged = _with(judged, quality | self._stand_bits(attempt))
        first = len(attempt) == 1
        self.stand_quality = judged.quality | (Quality.GOOD if first else self.stand_quality)
        self._settle(judged)
        return judged

    def take(self, reading: Reading) -> None:
        """Take in a reading that was judged before: a run goes on."""
        self.finding, self.odd, self.notes = None, "", []
        if reading.visit >= 0 and self._plan.counting == "counts":
            self._sliced_bits(reading)
        attempt = self._gathered(reading)
        if len(attempt) == self._plan.whole_stand:
            self._stand_bits(attempt)
        self._settle(reading)

    def _due(self, reading: Reading) -> float | None:
        """Return the counts that a visit should bring at least: what was kept here, else half the plan."""
        position, opening = (
            int(column[reading.visit]) for column in (self._plan.position, self._plan.opening)
        )
        place = self._places.get(position)
        if place is not None and place.stands and place.exposure[opening] > 0:
            return float(reading.live_s * place.counts[opening] / place.exposure[opening])
        return (
            None
            if self._expected_hz is None
            else reading.live_s * float(self._expected_hz[position, opening]) / 2
        )

    def _sliced_bits(self, reading: Reading) -> Quality:
        if reading.slices is None:
            return Quality.GOOD
        found = dispersion(self._parts(reading.slices))
        beyond = found.beyond(self.rules.dispersion_p, self._sliced.scale)
        if found.dof:
            self._sliced.add(found.ratio)
        return Quality.DISPERSION if beyond else Quality.GOOD

    def _gathered(self, reading: Reading) -> list[Reading]:
        """Return the visits of this attempt so far, when nothing else was done between them."""
        if reading.visit < 0:
            return []
        stand = int(self._plan.stand[reading.visit]), reading.attempt
        if stand != self._stand:
            self._stand, self._attempt = stand, []
            self.notes += self._laps.begins(stand[0])
            self.labels = self._laps.labels
        self._attempt.append(reading)
        if reading.slices is not None:
            self._laps.slices(int(self._plan.opening[reading.visit]), self._parts(reading.slices))
        return self._attempt

    def _parts(self, slices: Sequence[Sequence[int]]) -> list[float]:
        return [part[0] / self._plan.fano for part in slices]

    def _settle(self, reading: Reading) -> None:
        self._before = reading
        if len(self._attempt) == self._plan.whole_stand:
            self._stand, self._attempt = None, []

    def _stand_bits(self, attempt: Sequence[Reading]) -> Quality:
        """Return what a whole stand adds; it is kept as a reference where nothing speaks against it."""
        rows = rows_of_readings(attempt)
        found = detected(rows, self._plan)
        excluded = any(int(one.quality) & SPOILT for one in attempt)
        if self._plan.counting != "counts" or excluded or not found.fine.all():
            return Quality.GOOD
        position = int(self._plan.position[attempt[0].visit])
        opening, cells = self._plan.opening[rows.visit], len(self._plan.openings)
        wide = scatter(found.value, found.variance, self._plan.fano, self._plan.heralded is not None)
        counts, exposure = (added(opening, part, cells) for part in (found.value / wide, rows.live))
        place = self._places.setdefault(position, _Place(np.zeros(cells), np.zeros(cells)))
        bits = self._fingerprint_bits(attempt, place, counts, exposure)
        if bits & Quality.FINGERPRINT:
            return bits
        light = float(np.nansum(found.monitor)) if self._plan.monitor is not None else 0.0
        bits |= self._monitor_bits(place, counts, exposure, light, found)
        bits |= self._rate_bits(place, counts, exposure, attempt[0].position_mm)
        self._laps.stand(position, counts, exposure)
        place.counts += counts
        place.exposure += exposure
        place.light += light
        place.stands += 1
        return bits

    def _fingerprint_bits(
        self, attempt: Sequence[Reading], place: _Place, counts: FloatArray, exposure: FloatArray
    ) -> Quality:
        found = fingerprint(counts, exposure, place.counts, place.exposure)
        if not found.beyond(self.rules.fingerprint_p, self._stood.scale):
            if found.dof:
                self._stood.add(found.ratio)
            return Quality.GOOD
        if place.stands == 1 and place.refused is not None:
            again = fingerprint(counts, exposure, *place.refused)
            if not again.beyond(self.rules.fingerprint_p, self._stood.scale):
                # Two that agree, and the only one kept before does not: that one is odd.
                place.counts, place.exposure = (part.copy() for part in place.refused)
                return Quality.GOOD
        place.refused = (counts, exposure)
        name = names.name(int(self._plan.openings[found.worst]))
        where = f"{attempt[0].position_mm:g} mm"
        self.odd = name
        self.finding = f"The stand at {where} does not fit the earlier ones there; opening {name} stands out."
        return Quality.FINGERPRINT

    def _monitor_bits(
        self, place: _Place, counts: FloatArray, exposure: FloatArray, light: float, found: Detected
    ) -> Quality:
        """Return whether stand over monitor leaves the band that it kept all night."""
        if not (place.stands and place.light > 0 and light > 0):
            return Quality.GOOD
        strength = log(counts.sum() / float(place.counts @ (exposure / place.exposure)))
        off = strength - log(light / (place.light / place.stands))
        noise = float(np.nansum(found.monitor_variance)) / light**2
        again = 1 + 1 / place.stands
        sigma = sqrt(again * (1 / counts.sum() + noise))
        beyond = abs(off - self._lit.middle) > self.rules.monitor_sigma * max(sigma, self._wander())
        self._lit.add(off)
        return Quality.MONITOR if beyond else Quality.GOOD

    def _rate_bits(
        self, place: _Place, counts: FloatArray, exposure: FloatArray, position_mm: float
    ) -> Quality:
        """Return whether a stand's counts leave the band about those of the first stand there."""
        if place.first_hz is None and counts.sum() > 0:
            place.first_hz = counts / exposure
        if place.first_hz is None:
            return Quality.GOOD  # in the dark: no band yet
        low, high = self.rules.rate_band
        if low <= counts.sum() / float(place.first_hz @ exposure) <= high:
            self._strayed = 0
            return Quality.GOOD
        self._strayed += 1
        if self._strayed == STRAYED:
            self.notes.append(
                f"{STRAYED} stands in a row, the last at {position_mm:g} mm, count outside "
                f"{low:g} .. {high:g} of what the first stand there did: look at the source and the beam."
            )
        return Quality.RATE

    def _wander(self) -> float:
        """Return how far stand over monitor usually is from its median; infinite while that is not known."""
        values = np.array(self._lit.values)
        if len(values) < STANDS_TO_SCALE:
            return inf
        return TO_SIGMA * float(np.median(np.abs(values - np.median(values))))


def _with(reading: Reading, quality: Quality) -> Reading:
    """Return a reading with a quality; the same one where nothing is new."""
    return reading if quality == reading.quality else replace(reading, quality=quality)
