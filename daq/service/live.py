"""The page feed: what a run says of itself, built from its running estimate, at most once a second."""

from __future__ import annotations

import logging
import time
from collections import deque
from collections.abc import Callable, Mapping
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

import numpy as np

from daq.errors import StorageError
from daq.estimate import Running
from daq.estimate.rows import DETECTOR
from daq.estimate.watch import Watched, concerns
from daq.itinerary import Itinerary
from daq.ports import Clock
from daq.records import Reading
from daq.storage.feed import write_feed

log = logging.getLogger(__name__)

EVERY_S = 1.0
COLUMNS = 400
LOG_LINES = 30


class Live:
    """Keeps what the page shows of one run, and writes it to `live.json` beside the archive."""

    def __init__(
        self,
        folder: Path,
        meta: Mapping[str, Any],
        itinerary: Itinerary,
        clock: Clock,
        room: Callable[[], str] = lambda: "",
    ) -> None:
        self._room = room
        self._folder, self._meta, self._itinerary, self._clock = folder, meta, itinerary, clock
        self._expected = itinerary.rates_hz.mean(axis=1)
        self._place = itinerary.position_index
        self._written_s = float("-inf")
        self._started_ns, self._started_utc_ns = clock.now_ns(), clock.utc_ns()
        self._hours: list[float] = []
        self._levels: list[float] = []
        self._stand: list[
            tuple[float, float, float]
        ] = []  # counts, live seconds, expected rate of this stand
        self._repeated: set[int] = set()
        self._log: deque[dict[str, str]] = deque(maxlen=LOG_LINES)
        self._since: dict[str, str] = {}  # kind of warning -> when it was first raised
        self._last: Reading | None = None

    def say(self, text: str) -> None:
        """Add a sentence to the log that the page shows."""
        self._log.append({"utc": stamp(self._clock.utc_ns()), "text": text})

    def took(self, reading: Reading) -> None:
        """Take a committed reading into the rate strip."""
        before, self._last = self._last, reading
        if reading.visit < 0:
            return
        stand = int(self._itinerary.stand[reading.visit])
        if before is not None and before.visit >= 0 and int(self._itinerary.stand[before.visit]) != stand:
            self._close_stand(before)
        if reading.attempt > 1:
            self._repeated.add(stand)
        expected = float(self._itinerary.rates_hz[self._place[reading.visit], self._opening(reading)])
        amount = reading.live_s if self._meta.get("counting") == "power" else 1.0
        self._stand.append((reading.values[DETECTOR] * amount, reading.live_s, expected))

    def _opening(self, reading: Reading) -> int:
        return int(np.searchsorted(self._itinerary.openings, reading.opening))

    def _close_stand(self, last: Reading) -> None:
        counts, wanted = (
            sum(entry[0] for entry in self._stand),
            sum(live_s * hz for _, live_s, hz in self._stand),
        )
        self._stand.clear()
        if wanted > 0:
            self._hours.append((last.gate_close_ns - self._started_ns) / 3.6e12)
            self._levels.append(counts / wanted)

    def write(self, state: str, running: Running, ended: str | None = None, *, now: bool = False) -> None:
        """Write the feed, unless the last one is younger than a second."""
        if not now and time.monotonic() - self._written_s < EVERY_S:
            return
        self._written_s = time.monotonic()
        try:
            write_feed(self._folder, self._feed(state, running, ended))
        except StorageError as error:
            log.error("the page is not told: %s", error)

    def _feed(self, state: str, running: Running, ended: str | None) -> dict[str, Any]:
        estimate = running.estimate()
        figures = estimate.to_json()
        run_ns = self._clock.now_ns() - self._started_ns
        return {
            "format": 1,
            **{key: self._meta[key] for key in ("run", "title", "kind", "clock", "slits", "normalisation")},
            "blinding": self._meta["blinding"],
            "state": state,
            "started_utc": stamp(self._started_utc_ns),
            "run_s": run_ns / 1e9,
            "updated_utc": stamp(self._clock.utc_ns()),
            "written_utc": datetime.now(UTC).isoformat(timespec="milliseconds"),
            "visit": self._visit(),
            "ends_utc": stamp(self._ends_utc_ns(run_ns)),
            "positions_mm": self._itinerary.positions_mm.tolist(),
            "openings": self._itinerary.openings.tolist(),
            **_patterns(figures),
            "kappa": _kappa(figures),
            "history": running.history(),
            "rate": _columns(self._hours, self._levels, float(self._expected.mean())),
            "sensors": {} if self._last is None else {k: v[:2] for k, v in self._last.sensors.items()},
            "warnings": self._warnings(figures, run_ns),
            "log": list(self._log),
            "ended": None if ended is None else {"reason": ended, "utc": stamp(self._clock.utc_ns())},
            "truth_kappa": self._meta.get("truth_kappa"),
            **{key: figures[key] for key in ("estimator", "why")},
        }

    def _visit(self) -> dict[str, Any] | None:
        if self._last is None:
            return None
        last = self._last
        return {
            "number": last.visit,
            "of": len(self._itinerary),
            "opening": last.opening,
            "position_mm": last.position_mm,
            "attempt": last.attempt,
        }

    def _ends_utc_ns(self, run_ns: int) -> int:
        """Return when the run should end: what is left of the plan, added to now."""
        done = -1 if self._last is None else self._last.visit
        left_s = self._itinerary.total_s - (float(self._itinerary.start_s[done]) if done >= 0 else 0.0)
        return self._started_utc_ns + run_ns + round(left_s * 1e9)

    def _warnings(self, figures: Mapping[str, Any], run_ns: int) -> list[dict[str, str]]:
        watched = Watched(
            levels=self._levels,
            hours=run_ns / 3.6e12,
            pairs=figures["pairs"],
            excess=figures["excess"],
            stands_done=len(self._levels),
            stands_left_out=figures["stands_left_out"],
            stands_repeated=len(self._repeated),
            short_of_room=self._room(),
        )
        now = stamp(self._clock.utc_ns())
        found = concerns(watched)
        self._since = {one.kind: self._since.get(one.kind, now) for one in found}
        return [
            {
                "kind": one.kind,
                "what": one.what,
                "do": one.do,
                "good": one.good,
                "since_utc": self._since[one.kind],
            }
            for one in found
        ]


def stamp(utc_ns: int) -> str:
    """Return a UTC time as text, RFC 3339 to the second."""
    return datetime.fromtimestamp(utc_ns / 1e9, UTC).isoformat(timespec="seconds").replace("+00:00", "Z")


def _patterns(figures: Mapping[str, Any]) -> dict[str, Any]:
    by_opening = {
        key: [list(column) for column in zip(*figures[key], strict=True)]
        for key in ("rates_hz", "rates_se_hz")
    }
    return by_opening | {key: figures[key] for key in ("epsilon_hz", "epsilon_se_hz")}


def _kappa(figures: Mapping[str, Any]) -> dict[str, Any]:
    same = ("interval_95", "whole_night_95", "pairs", "planned_pairs", "excess", "excess_se", "printable")
    return {
        "value": figures["kappa"],
        "se": figures["kappa_se"],
        "counting_se": figures["kappa_counting_se"],
        **{key: figures[key] for key in (*same, "goal_se", "forecast_se")},
    }


def _columns(hours: list[float], levels: list[float], scale_hz: float) -> dict[str, list[float]]:
    """Return least, mean and most of the rate in at most COLUMNS columns: every dip is kept."""
    if not hours:
        return {"hours": [], "low": [], "mean": [], "high": []}
    rates = np.asarray(levels) * scale_hz
    cuts = np.unique(np.linspace(0, rates.size, min(COLUMNS, rates.size) + 1).astype(int))[:-1]
    many = np.diff(np.append(cuts, rates.size))
    return {
        "hours": np.asarray(hours)[np.append(cuts[1:], rates.size) - 1].round(4).tolist(),
        "low": np.minimum.reduceat(rates, cuts).round(2).tolist(),
        "mean": (np.add.reduceat(rates, cuts) / many).round(2).tolist(),
        "high": np.maximum.reduceat(rates, cuts).round(2).tolist(),
    }
