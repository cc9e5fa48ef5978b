"""The page feed: what a run says of itself, built from its running estimate, at most once a second."""

from __future__ import annotations

import logging
import time
from collections import deque
from collections.abc import Callable, Mapping
from dataclasses import asdict
from datetime import UTC, datetime
from pathlib import Path
from typing import Any

from daq.errors import StorageError
from daq.estimate import Blinding, Running, plan_of_dataset, readings_of_dataset
from daq.estimate.budget import Budget, known_of
from daq.estimate.geometry import Geometry
from daq.estimate.shown import shown_table
from daq.estimate.standing import Change, Standing
from daq.estimate.wake import Held
from daq.itinerary import Itinerary
from daq.ports import Clock
from daq.records import Reading
from daq.service.strip import Strip
from daq.service.watcher import Watcher
from daq.storage.feed import read_feed, write_feed
from daq.storage.reader import open_visits

log = logging.getLogger(__name__)

EVERY_S, MOST_S = 1.0, 5.0  # between two feeds; a long run's takes a while to work out, and the run goes on
SHARE = 0.05  # of the time that the feed may take
GROWN = 1 + 1 / 64  # an estimate costs what the run is long, so a long run asks it after many laps
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
        restarts: int = 0,
        outlet: Callable[[Mapping[str, Any]], None] = lambda feed: None,
    ) -> None:
        self._folder, self._meta, self._itinerary, self._clock = folder, meta, itinerary, clock
        self._outlet = outlet
        self._known = known_of(meta)
        self._blinding = Blinding(str(meta["blinding"]))
        self._mean_hz = float(itinerary.rates_hz.mean())
        self._next_s = float("-inf")  # on the wall's clock: when the feed is written again
        self._asked_stands = 0
        self._started_utc = str(meta.get("started_utc") or stamp(clock.utc_ns()))
        self._strip = Strip(itinerary, meta)
        self.watcher = Watcher(self._strip, itinerary, meta, room, restarts)
        self._log: deque[dict[str, str]] = deque(maxlen=LOG_LINES)
        self._last: Reading | None = None
        self._held: tuple[Held, str] | None = None  # and since when, UTC
        self._muted_until_utc_ns = 0

    @property
    def stands(self) -> int:
        """How many stands are closed."""
        return len(self._strip.levels)

    @property
    def due(self) -> bool:
        """Whether the run has grown so much that its estimate is worth asking again."""
        return self.stands >= GROWN * self._asked_stands

    def say(self, text: str) -> None:
        """Add a sentence to the log that the page shows."""
        self._log.append({"utc": stamp(self._clock.utc_ns()), "text": text})

    def took(self, reading: Reading, odd: str = "") -> bool:
        """Take in a committed reading; return whether the stand before it is closed now.

        Parameters
        ----------
        odd
            The opening that stood out in that stand, or nothing.
        """
        self._last = reading
        self.watcher.took(reading)
        closed = self._strip.took(reading)
        if closed:
            self.watcher.stood(odd)
        return closed

    def look(
        self,
        running: Running,
        held: Held | None = None,
        ended: str = "",
        *,
        anew: bool = False,
        over: bool = False,
    ) -> tuple[Change, ...]:
        """Look at every condition again and return what became of the warnings; `anew` asks the estimate."""
        if anew:
            self._asked_stands = self.stands
            self.watcher.know(running.estimate().to_json())
        now = stamp(self._clock.utc_ns())
        if held is None:
            self._held = None
        elif self._held is None or self._held[0].cause != held.cause:
            self._held = held, now
        else:
            self._held = held, self._held[1]
        return self.watcher.look(now, self._left_s(), held, ended, over=over)

    def mute(self, until_utc_ns: int) -> None:
        """Say until when nobody wants to be called."""
        self._muted_until_utc_ns = until_utc_ns

    @property
    def muted(self) -> bool:
        """Whether nobody wants to be called now."""
        return self._clock.utc_ns() < self._muted_until_utc_ns

    def write(self, state: str, running: Running, ended: str | None = None, *, now: bool = False) -> None:
        """Write the feed, unless the last one is younger than a second; where it is long work, up to five."""
        begun_s = time.monotonic()
        if not now and begun_s < self._next_s:
            return
        try:
            feed = self._feed(state, running, ended)
            write_feed(self._folder, feed)
            self._outlet(feed)
        except StorageError as error:
            log.error("the page is not told: %s", error)
        took_s = time.monotonic() - begun_s
        self._next_s = begun_s + min(max(EVERY_S, took_s / SHARE), MOST_S)

    def _feed(self, state: str, running: Running, ended: str | None) -> dict[str, Any]:
        estimate = running.estimate()
        figures = estimate.to_json()
        return {
            "format": 1,
            **{key: self._meta[key] for key in ("run", "title", "kind", "clock", "slits", "normalisation")},
            "blinding": self._meta["blinding"],
            "state": state,
            "started_utc": self._started_utc,
            "run_s": self._run_s(),
            "updated_utc": stamp(self._clock.utc_ns()),
            "written_utc": datetime.now(UTC).isoformat(timespec="milliseconds"),
            "visit": self._visit(),
            "ends_utc": stamp(self._clock.utc_ns() + round(self._left_s() * 1e9)),
            "positions_mm": self._itinerary.positions_mm.tolist(),
            "openings": self._itinerary.openings.tolist(),
            **_patterns(figures),
            "kappa": _kappa(figures),
            "history": running.history(),
            "budget": shown_table(_budget(running.budget(self._known)), self._blinding),
            "geometry": _geometry(running.geometry(self._meta.get("cuts"))),
            "rate": self._strip.columns(self._mean_hz),
            "sensors": {} if self._last is None else {k: v[:2] for k, v in self._last.sensors.items()},
            "warnings": [_told(one) for one in self.watcher.standing],
            "holding": self._holding(),
            "in_doubt": any(one.says.in_doubt for one in self.watcher.standing),
            "muted_until_utc": stamp(self._muted_until_utc_ns) if self.muted else None,
            "log": list(self._log),
            "ended": None if ended is None else {"reason": ended, "utc": stamp(self._clock.utc_ns())},
            "truth_kappa": None if self._blinding.hides else self._meta.get("truth_kappa"),
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

    def _left_s(self) -> float:
        """Return what is left of the plan [s]."""
        done = -1 if self._last is None else self._last.visit
        return self._itinerary.total_s - (float(self._itinerary.start_s[done]) if done >= 0 else 0.0)

    def _run_s(self) -> float:
        """Return the time on the run clock since the first gate: breaks of the program do not count."""
        first_ns = self._strip.first_ns
        return 0.0 if first_ns is None else (self._clock.now_ns() - first_ns) / 1e9

    def _holding(self) -> dict[str, Any] | None:
        if self._held is None:
            return None
        held, since = self._held
        return {"cause": held.cause, "why": held.why, "since_utc": since, "at_bench": held.at_bench}


def _budget(found: Budget | None) -> dict[str, Any] | None:
    """Return the lines of a budget that are known, in the words and figures that the page shows."""
    if found is None:
        return None
    lines = [
        {"name": line.name, "value": line.value, "kind": line.kind, "halve": line.halve}
        for line in found.lines
        if line.value is not None
    ]
    return {"lines": lines, "total_se": found.total_se}


def _geometry(found: Geometry | None) -> dict[str, Any] | None:
    return None if found is None else asdict(found)


def _told(one: Standing) -> dict[str, Any]:
    """Return a warning as the page gets it."""
    says = one.says
    seen = {"by": one.acknowledged_by, "utc": one.acknowledged_utc} if one.acknowledged_by else None
    return {
        "id": one.name,
        "kind": says.kind,
        "level": "wake" if says.wakes else "note",
        "what": says.what,
        "did": says.did,
        "do": says.do,
        "cost": says.cost,
        "good": says.good,
        "in_doubt": says.in_doubt,
        "since_utc": one.since_utc,
        "updated_utc": one.updated_utc,
        "acknowledged": seen,
    }


def tell_again(folder: Path) -> None:
    """Write the last feed of a run anew, with what may be seen of it now."""
    feed, visits = read_feed(folder), open_visits(folder)
    if feed is None:
        return
    plan = plan_of_dataset(visits)
    running, hidden = Running(plan), plan.blinding
    for reading in readings_of_dataset(visits):
        running.add(reading)
    figures = running.estimate().to_json()
    feed |= {**_patterns(figures), "kappa": _kappa(figures), "history": running.history()}
    feed |= {"budget": shown_table(_budget(running.budget(known_of(visits.attrs))), hidden)}
    feed |= {"geometry": _geometry(running.geometry(visits.attrs.get("cuts")))}
    feed |= {"blinding": hidden.state}
    feed |= {"truth_kappa": None if hidden.hides else visits.attrs.get("truth_kappa")}
    if hidden.hides:  # its levels hold all openings together
        feed["rate"] = {name: [] for name in feed["rate"]}
    write_feed(folder, feed)


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
