"""The watcher: what the conditions look at, gathered as readings come home, and the warnings that stand."""

from __future__ import annotations

from collections import Counter, deque
from collections.abc import Callable, Mapping
from typing import Any

from daq.estimate.rows import DETECTOR
from daq.estimate.shift import ShiftChart
from daq.estimate.standing import Change, Standing, acknowledge, look_again
from daq.estimate.wake import LATEST_STANDS, Danger, Held, dangers, wrong_opening
from daq.estimate.watch import Thresholds, Watched, concerns
from daq.itinerary import Itinerary
from daq.records import Quality, Reading
from daq.service.shut import Shut
from daq.service.strip import DUE_COUNTS, Strip

SILENT_STANDS = 3
DARK_LEVEL = 0.05  # of the expected counts; what a detector counts in the dark stays below


class Watcher:
    """Watches one run; `look` says what stands now and what changed."""

    def __init__(
        self,
        strip: Strip,
        itinerary: Itinerary,
        meta: Mapping[str, Any],
        room: Callable[[], str],
        restarts: int,
    ) -> None:
        self.standing: tuple[Standing, ...] = ()
        self._strip, self._itinerary, self._meta = strip, itinerary, meta
        self._room, self._restarts = room, restarts
        self._figures: Mapping[str, Any] = {}
        self._raised: dict[str, int] = {}
        self._chart = ShiftChart()
        self._odd: deque[str] = deque(maxlen=LATEST_STANDS)
        self.remedy_left = False  # the mask may find its reference again by itself, once
        self._dark = 0
        self._load = 0.0
        self._shut = Shut()
        self._silent: Counter[str] = Counter()

    def took(self, reading: Reading) -> None:
        """Take in a reading."""
        if reading.visit < 0:
            return
        rate = reading.values[DETECTOR] / reading.live_s if reading.live_s > 0 else 0.0
        if not reading.quality & Quality.OVERFLOW:
            self._load = max(self._load, rate * float(self._meta.get("dead_time_s") or 0.0))
        if reading.opening == 0:
            lap = int(self._itinerary.lap[reading.visit])
            self._shut.add(lap, reading.values[DETECTOR], reading.live_s)
        for name in self._meta.get("sensors", ()):
            self._silent[name] = 0 if name in reading.sensors else self._silent[name] + 1

    def stood(self, odd: str) -> None:
        """Take in the stand that the strip has closed; `odd` is the opening that stood out, or nothing."""
        latest = self._strip.latest
        if latest is None:
            return
        self._odd.append(odd)
        dark = latest.due > DUE_COUNTS and latest.level < DARK_LEVEL
        self._dark = self._dark + 1 if dark else 0
        self._chart.add(latest.level, latest.variance, self._strip.hours[-1])

    @property
    def dark_stands(self) -> int:
        """How many stands in a row brought no light."""
        return self._dark

    @property
    def wrong_opening(self) -> str:
        """The opening that does not fit in many of the latest stands, "" where there is none."""
        return wrong_opening(tuple(self._odd))

    def use_remedy(self) -> None:
        """Note that the mask finds its reference again: what did not fit before says nothing any more."""
        self.remedy_left = False
        self._odd.clear()

    @property
    def restarts(self) -> int:
        """How often the program was started anew in the last hour."""
        return self._restarts

    def know(self, figures: Mapping[str, Any]) -> None:
        """Take in the figures of the estimate."""
        self._figures = figures

    def look(
        self, utc: str, left_s: float, held: Held | None = None, ended: str = "", *, over: bool = False
    ) -> tuple[Change, ...]:
        """Look at every condition again and return what became of the warnings.

        Parameters
        ----------
        left_s
            What is left of the plan [s].
        ended
            Why the run has ended before its planned end.
        """
        found = (*dangers(self._danger(left_s, held, ended)), *concerns(self._watched(over)))
        self.standing, changes = look_again(self.standing, found, self._raised, utc)
        return changes

    def acknowledge(self, name: str, who: str, utc: str) -> None:
        """Note that a person has seen a warning; all of them for ""."""
        self.standing = acknowledge(self.standing, name, who, utc)

    def _danger(self, left_s: float, held: Held | None, ended: str) -> Danger:
        latest = self._strip.latest
        lit = None if latest is None or latest.monitor is None else latest.monitor > 0
        return Danger(
            left_h=left_s / 3600,
            planned_h=self._itinerary.total_s / 3600,
            planned_se=self._figures.get("forecast_se"),
            levels=self._strip.levels,
            held=held,
            dark_stands=self._dark,
            expected_counts=0.0 if latest is None else latest.due,
            monitor_lives=lit,
            odd_openings=tuple(self._odd),
            remedy_left=self.remedy_left,
            closed=self._shut.rates(),
            restarts=self._restarts,
            ended=ended,
        )

    def _watched(self, over: bool) -> Watched:
        many = self._itinerary.visits_per_stand or 1
        return Watched(
            levels=self._strip.levels,
            hours=self._strip.hours[-1] if self._strip.hours else 0.0,
            pairs=self._figures.get("pairs", 0),
            excess=self._figures.get("excess"),
            stands_done=len(self._strip.levels),
            stands_left_out=self._figures.get("stands_left_out", 0),
            stands_repeated=len(self._strip.repeated),
            short_of_room=self._room(),
            over=over,
            shift=self._chart.last,
            flagged=self._strip.flagged,
            load=self._load,
            goal_se=self._figures.get("goal_se"),
            forecast_se=self._figures.get("forecast_se"),
            order=self._itinerary.order,
            thresholds=Thresholds(**self._meta.get("warn", {})),
            silent_sensors=[name for name, times in self._silent.items() if times >= SILENT_STANDS * many],
        )
