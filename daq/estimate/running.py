"""Running: the same estimate while the run is going on, at a few microseconds a visit."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.budget import Budget, Known, budget
from daq.estimate.detected import detected
from daq.estimate.geometry import Geometry, geometry_after
from daq.estimate.headline import headline
from daq.estimate.plan import Plan
from daq.estimate.rows import rows_of_readings
from daq.estimate.sensitivity import taken_visits
from daq.estimate.settle import Settled, settle, taking
from daq.estimate.shown import shown, shown_numbers
from daq.estimate.sums import Sums, plainly, sums_of
from daq.estimate.tables import tables_of
from daq.estimate.veil import veiled
from daq.estimate.visits import complete_pairs, no_visits, write
from daq.estimate.whole import Estimate, estimate_visits
from daq.records import EXCLUDING, Reading

HISTORY_POINTS = 60  # the page draws no more, so that a long run weighs what a short one does
FITS_AT_ONCE = 40  # earlier ends of an irregular run that are fitted again when a run goes on


class Running:
    """The estimate of a run that is going on; readings may come in any order.

    A stand is taken into the tables when one of its attempts is whole; everything else is worked out when
    somebody asks.
    """

    def __init__(self, plan: Plan) -> None:
        self._plan = plan
        self._stand = plan.stand.tolist()
        self._pair = plan.stand_places[0].tolist()
        self._visits = no_visits(plan)
        self._open: dict[tuple[int, int], dict[int, Reading]] = {}
        self._spoken: dict[int, tuple[bool, int]] = {}  # by stand: is the attempt that speaks good, which
        self._closed_ns: dict[int, int] = {}
        self._first_ns: int | None = None
        self._estimate: Estimate | None = None
        self._settled: Settled | None = None  # what the complete pairs say
        self._budget: tuple[Settled, Budget | None] | None = None  # of what the complete pairs said
        self._geometry: tuple[Settled, Geometry | None] | None = None
        self._touched: set[int] = set()  # pairs with news since then
        self._past_pairs: list[int] = []  # the complete pairs that the remembered history rests on
        self._past: dict[int, dict[str, float | None]] = {}

    def add(self, reading: Reading) -> None:
        """Take in a reading; unplanned ones (visit -1) are passed over."""
        if reading.visit < 0:
            return
        stand = self._stand[reading.visit]
        attempt = self._open.setdefault((stand, reading.attempt), {})
        attempt[reading.visit] = reading
        if len(attempt) == self._plan.whole_stand:
            self._take_in(stand, reading.attempt, self._open.pop((stand, reading.attempt)))

    def estimate(self) -> Estimate:
        """Return the estimate so far, as shown: the one that `estimate_run` gives for the same readings."""
        if self._estimate is None:
            found = estimate_visits(self._visits, self._plan, self._settle())
            self._estimate = shown(found, self._plan.blinding)
        return self._estimate

    def after(self, pairs: int) -> Mapping[str, Any]:
        """Return the headline as it stood after so many complete pairs, for rules of the program alone."""
        value, live, variance = (column[:pairs] for column in self._columns())
        then = Sums(value, live, variance)
        found = headline(veiled(tables_of(then), self._plan), pairs, self._plan)
        return {**found, "planned_pairs": self._plan.planned_pairs}

    def _settle(self) -> Settled:
        """Return what the complete pairs say; it is worked out again when one of them has news."""
        complete = set(complete_pairs(self._visits, self._plan).tolist())
        if self._settled is None or self._touched & complete:
            before, self._settled = self._settled, settle(self._visits, self._plan)
            changed = before is None or before.estimator != self._settled.estimator
            if changed and self._settled.strength is None:
                self._past.clear()  # what a fit told then stays: it would be long work to do again
        self._touched.clear()
        return self._settled

    def budget(self, known: Known) -> Budget | None:
        """Return where the error of kappa comes from after the complete pairs; None while there is no error.

        What the encoders said of each visit is not kept here: the archive's own account adds that line.
        """
        settled = self._settle()
        if settled.numbers.get("kappa_se") is None:
            return None
        if self._budget is None or self._budget[0] is not settled:
            taken = taken_visits(self._visits, self._plan, plainly(self._visits, self._plan).visits)
            found = None if taken is None else budget(self._visits, self._plan, taken, settled.numbers, known)
            self._budget = settled, found
        return self._budget[1]

    def geometry(self, record: Mapping[str, Any] | None) -> Geometry | None:
        """Return what the cuts of the slits did to the complete pairs, from the run's record of them."""
        settled = self._settle()
        if self._geometry is None or self._geometry[0] is not settled:
            self._geometry = settled, geometry_after(self._visits, self._plan, settled, record)
        return self._geometry[1]

    def history(self) -> dict[str, list[float | None]]:
        """Return what was known after each complete pair, in the order of the pairs; None while undefined.

        `hours` since the first gate, `kappa`, and both bands as `interval_low`, `interval_high`, `whole_low`,
        `whole_high`; at most 60 pairs, evenly thinned, the last one always.
        """
        pairs = complete_pairs(self._visits, self._plan).tolist()
        if pairs[: len(self._past_pairs)] != self._past_pairs:
            self._past.clear()
        self._past_pairs = pairs
        stride = max(1, -(-len(pairs) // HISTORY_POINTS))
        ends = sorted({*range(stride, len(pairs) + 1, stride), len(pairs)} - {0})
        settled = self._settle()
        missing = [end for end in ends if end not in self._past]
        if missing and settled.strength is not None:
            self._past |= {end: self._fitted_after(pairs, end, settled, missing) for end in missing}
        elif missing:
            sums = Sums(*self._columns())
            self._past |= {end: _known_after(sums, end, self._plan) for end in missing}
        self._past = {end: self._past[end] for end in ends}
        first_ns = self._first_ns or 0
        columns: dict[str, list[float | None]] = {
            "hours": [(self._closed_ns[pairs[end - 1]] - first_ns) / 3.6e12 for end in ends]
        }
        return columns | {name: [self._past[end][name] for end in ends] for name in _BANDS}

    def _columns(self) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Return value, live time and variance of the complete pairs, as the settled estimator takes them."""
        sums = sums_of(self._visits, self._plan, taking(self._settle(), self._visits, self._plan))
        return sums.value, sums.live, sums.variance

    def _fitted_after(
        self, pairs: list[int], end: int, settled: Settled, missing: list[int]
    ) -> dict[str, float | None]:
        """Return kappa and bands of a fit to the first pairs; undefined where there are too many to fit."""
        if end == len(pairs):
            return _bands(shown_numbers(settled.numbers, self._plan.blinding))
        if len(missing) > FITS_AT_ONCE:
            return dict.fromkeys(_BANDS)
        then = np.isin(self._plan.stand_places[0], pairs[:end])
        visits = replace(self._visits, done=self._visits.done & then)
        return _bands(shown_numbers(settle(visits, self._plan).numbers, self._plan.blinding))

    def _take_in(self, stand: int, attempt: int, readings: dict[int, Reading]) -> None:
        in_order = [readings[visit] for visit in sorted(readings)]
        rows = rows_of_readings(in_order)
        found = detected(rows, self._plan)
        good = bool(found.fine.all()) and not any(reading.quality & EXCLUDING for reading in in_order)
        pair = self._pair[stand]
        self._visits.done[stand] = True
        self._touched.add(pair)
        if pair in self._past_pairs:
            self._past.clear()
        self._note_times(pair, in_order)
        if (good, attempt) >= self._spoken.get(stand, (False, 0)):  # a good attempt, then the latest
            self._spoken[stand] = (good, attempt)
            self._visits.used[stand] = good
            write(self._visits, rows, found, np.ones(len(in_order), bool), self._plan)
        self._estimate = None

    def _note_times(self, pair: int, readings: list[Reading]) -> None:
        first_ns = min(reading.gate_open_ns for reading in readings)
        closed_ns = max(reading.gate_close_ns for reading in readings)
        self._first_ns = first_ns if self._first_ns is None else min(self._first_ns, first_ns)
        self._closed_ns[pair] = max(self._closed_ns.get(pair, closed_ns), closed_ns)


_BANDS = ("kappa", "interval_low", "interval_high", "whole_low", "whole_high")


def _known_after(sums: Sums, pairs: int, plan: Plan) -> dict[str, float | None]:
    """Return kappa and both bands as they stood after so many pairs."""
    then = Sums(sums.value[:pairs], sums.live[:pairs], sums.variance[:pairs])
    return _bands(shown_numbers(headline(veiled(tables_of(then), plan), pairs, plan), plan.blinding))


def _bands(numbers: Mapping[str, Any]) -> dict[str, float | None]:
    undefined = (None, None)
    bands = (
        numbers["kappa"],
        *(numbers["interval_95"] or undefined),
        *(numbers["whole_night_95"] or undefined),
    )
    return dict(zip(_BANDS, bands, strict=True))
