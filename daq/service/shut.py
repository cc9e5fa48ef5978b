"""Shut: what was counted behind shut slits, lap by lap; light that leaks in shows there first."""

from __future__ import annotations

from daq.estimate.wake import Closed

LAPS_BEFORE = 2
LATEST_LAPS = 2


class Shut:
    """Keeps counts and live time of the latest laps, and the sum of all before: a long run weighs no more."""

    def __init__(self) -> None:
        self._laps: dict[int, tuple[float, float]] = {}  # the one under way, and the latest before it
        self._before = (0, 0.0, 0.0)  # laps, counts, live seconds

    def add(self, lap: int, counts: float, live_s: float) -> None:
        """Take in a visit with no slit open; laps come in order."""
        so_far = self._laps.get(lap, (0.0, 0.0))
        self._laps[lap] = so_far[0] + counts, so_far[1] + live_s
        if len(self._laps) > LATEST_LAPS + 1:
            oldest = self._laps.pop(min(self._laps))
            laps, *sums = self._before
            self._before = laps + 1, sums[0] + oldest[0], sums[1] + oldest[1]

    def rates(self) -> Closed | None:
        """Return the rates of the last two whole laps against those before; None while there are too few."""
        laps, counts, live_s = self._before
        if laps < LAPS_BEFORE or not live_s:
            return None
        whole = [part for _, part in sorted(self._laps.items())][:-1]
        last_hz = [part[0] / part[1] for part in whole if part[1]]
        return Closed(last_hz, counts / live_s, counts**0.5 / live_s)
