"""The rate strip: the level of the source, stand by stand, and what each stand showed."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from daq.estimate import Blinding
from daq.estimate.rows import DETECTOR
from daq.estimate.shown import HIDDEN_ORDER
from daq.itinerary import Itinerary
from daq.records import Quality, Reading

COLUMNS = 120  # a long run weighs what a short one does on its way to a phone
DUE_COUNTS = 12.0  # so few could be none by chance


@dataclass(frozen=True, slots=True)
class Stood:
    """A closed stand: level over the expected one with its variance, counts and counts due, bits, monitor."""

    level: float
    variance: float
    counts: float
    due: float
    quality: Quality
    monitor: float | None


class Strip:
    """Keeps the level of every stand of a run; hours are of measuring, since the first gate."""

    def __init__(self, itinerary: Itinerary, meta: Mapping[str, Any]) -> None:
        self.hours: list[float] = []
        self.levels: list[float] = []
        self.latest: Stood | None = None
        self.repeated: set[int] = set()
        self.flagged: Counter[str] = Counter()
        self.first_ns: int | None = None
        self._itinerary = itinerary
        self._place = itinerary.position_index  # of every visit: too long to work out anew at each
        self._hides = Blinding(str(meta["blinding"])).hides
        self._power = meta.get("counting") == "power"
        self._fano = float(meta.get("fano") or 1.0)
        self._monitor: int | None = meta.get("monitor_channel")
        self._visits: list[Reading] = []

    def took(self, reading: Reading) -> bool:
        """Take in a reading; return whether it closes its stand. What was broken off before is dropped."""
        if self.first_ns is None:
            self.first_ns = reading.gate_open_ns
        if reading.visit < 0:
            return False
        if self._visits and self._key(self._visits[-1]) != self._key(reading):
            self._visits.clear()
        if reading.attempt > 1:
            self.repeated.add(int(self._itinerary.stand[reading.visit]))
        self._visits.append(reading)
        closes = self._itinerary.ends_stand(reading.visit)
        if closes:
            self._close()
        return closes

    def _close(self) -> None:
        visits, self._visits = [visit for visit in self._visits if not self._hidden(visit)], []
        due = sum(visit.live_s * self._rate_hz(visit) for visit in visits)
        if not visits or due <= 0 or self.first_ns is None:
            return
        amounts = [visit.values[DETECTOR] * (visit.live_s if self._power else 1.0) for visit in visits]
        quality = Quality.GOOD
        for visit in visits:
            quality |= visit.quality
        counts = sum(amounts)
        variance = 0.0 if self._power else self._fano * counts / due**2
        self.latest = Stood(counts / due, variance, counts, due, quality, self._light(visits))
        self.hours.append((visits[-1].gate_close_ns - self.first_ns) / 3.6e12)
        self.levels.append(counts / due)
        self.flagged.update(str(bit.name) for bit in quality)

    def columns(self, scale_hz: float) -> dict[str, list[float]]:
        """Return least, mean and most of the rate in at most COLUMNS columns: every dip is kept."""
        if not self.hours:
            return {"hours": [], "low": [], "mean": [], "high": []}
        rates = np.asarray(self.levels) * scale_hz
        cuts = np.unique(np.linspace(0, rates.size, min(COLUMNS, rates.size) + 1).astype(int))[:-1]
        many = np.diff(np.append(cuts, rates.size))
        return {
            "hours": np.asarray(self.hours)[np.append(cuts[1:], rates.size) - 1].round(4).tolist(),
            "low": np.minimum.reduceat(rates, cuts).round(2).tolist(),
            "mean": (np.add.reduceat(rates, cuts) / many).round(2).tolist(),
            "high": np.maximum.reduceat(rates, cuts).round(2).tolist(),
        }

    def _hidden(self, reading: Reading) -> bool:
        """Return whether a reading is hidden: with all others of a stand its level would give it away."""
        return self._hides and reading.opening.bit_count() >= HIDDEN_ORDER

    def _key(self, reading: Reading) -> tuple[int, int]:
        return int(self._itinerary.stand[reading.visit]), reading.attempt

    def _rate_hz(self, reading: Reading) -> float:
        opening = int(np.searchsorted(self._itinerary.openings, reading.opening))
        return float(self._itinerary.rates_hz[self._place[reading.visit], opening])

    def _light(self, visits: list[Reading]) -> float | None:
        channel = self._monitor
        return None if channel is None else float(sum(visit.values[channel] for visit in visits))
