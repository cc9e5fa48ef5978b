"""Running: the same estimate while the run is going on, at a few microseconds a visit."""

from __future__ import annotations

from dataclasses import dataclass
from math import nan

import numpy as np

from daq.estimate.arrays import FloatArray, IntArray
from daq.estimate.counting import true_counts
from daq.estimate.dataset import DETECTOR
from daq.estimate.plan import Plan, stand_places
from daq.estimate.sums import Rows, Sums, complete_pairs, countable, no_stands, sums_of
from daq.estimate.whole import Estimate, estimate_sums
from daq.records import EXCLUDING, Reading


@dataclass(frozen=True, slots=True)
class History:
    """What was known after each complete pair, in the order of the pairs; NaN while undefined.

    `closed_ns` is the run clock at the last gate of the pair.
    """

    closed_ns: IntArray
    kappa: FloatArray
    interval_low: FloatArray
    interval_high: FloatArray
    whole_low: FloatArray
    whole_high: FloatArray


class Running:
    """The estimate of a run that is going on; readings may come in any order.

    A stand is taken into the tables when one of its attempts is whole; everything else is worked out when
    somebody asks.
    """

    def __init__(self, plan: Plan) -> None:
        self._plan = plan
        self._stand, self._opening = plan.stand.tolist(), plan.opening.tolist()
        self._pair = stand_places(plan)[0].tolist()
        self._stands = no_stands(plan)
        self._open: dict[tuple[int, int], dict[int, Reading]] = {}
        self._used_attempt: dict[int, int] = {}
        self._changes: dict[int, int] = {}  # pair -> how often one of its stands was taken in
        self._closed_ns: dict[int, int] = {}
        self._estimate: Estimate | None = None
        self._past: list[tuple[tuple[int, int], tuple[float, ...]]] = []

    def add(self, reading: Reading) -> None:
        """Take in a reading; unplanned ones (visit -1) are passed over."""
        if reading.visit < 0:
            return
        stand = self._stand[reading.visit]
        attempt = self._open.setdefault((stand, reading.attempt), {})
        attempt[self._opening[reading.visit]] = reading
        if len(attempt) == len(self._plan.openings):
            self._take_in(stand, reading.attempt, self._open.pop((stand, reading.attempt)))

    def estimate(self) -> Estimate:
        """Return the estimate so far, the one that `estimate_run` gives for the same readings."""
        if self._estimate is None:
            self._estimate = estimate_sums(sums_of(self._stands, self._plan), self._plan)
        return self._estimate

    def history(self) -> History:
        """Return what was known after each complete pair."""
        pairs = complete_pairs(self._stands, self._plan).tolist()
        keys = [(pair, self._changes[pair]) for pair in pairs]
        known = 0
        while known < min(len(keys), len(self._past)) and keys[known] == self._past[known][0]:
            known += 1
        del self._past[known:]
        if known < len(keys):
            sums = sums_of(self._stands, self._plan)
            self._past += [
                (keys[at], _known_after(sums, at + 1, self._plan)) for at in range(known, len(keys))
            ]
        columns = np.array([numbers for _, numbers in self._past]).reshape(-1, 5).T
        return History(np.array([self._closed_ns[pair] for pair in pairs], np.int64), *columns)

    def _take_in(self, stand: int, attempt: int, readings: dict[int, Reading]) -> None:
        in_order = [readings[opening] for opening in sorted(readings)]
        rows = _rows(in_order)
        good = bool(countable(rows, self._plan).all()) and not any(
            reading.quality & EXCLUDING for reading in in_order
        )
        pair = self._pair[stand]
        self._stands.done[stand] = True
        self._changes[pair] = self._changes.get(pair, 0) + 1
        closed_ns = max(reading.gate_close_ns for reading in in_order)
        self._closed_ns[pair] = max(self._closed_ns.get(pair, 0), closed_ns)
        if good and attempt >= self._used_attempt.get(stand, 0):
            self._used_attempt[stand] = attempt
            self._write(stand, rows)
        self._estimate = None

    def _write(self, stand: int, rows: Rows) -> None:
        plan, stands = self._plan, self._stands
        stands.live[stand] = rows.live
        stands.value[stand], stands.variance[stand] = true_counts(
            rows.value, rows.live, rows.variance, plan.dead_time_s, plan.dead_time_kind
        )
        stands.used[stand] = True


def _rows(readings: list[Reading]) -> Rows:
    """Return readings of one attempt as rows."""
    return Rows(
        np.array([reading.visit for reading in readings], np.int64),
        np.array([reading.attempt for reading in readings], np.int64),
        np.array([int(reading.quality) for reading in readings], np.int64),
        np.array([reading.values[DETECTOR] for reading in readings], float),
        np.array([reading.live_s for reading in readings], float),
        np.array(
            [nan if reading.values_var is None else reading.values_var[DETECTOR] for reading in readings]
        ),
    )


def _known_after(sums: Sums, pairs: int, plan: Plan) -> tuple[float, ...]:
    """Return kappa and both bands as they stood after so many pairs."""
    then = estimate_sums(Sums(sums.value[:pairs], sums.live[:pairs], sums.variance[:pairs]), plan)
    undefined = (nan, nan)
    return (
        nan if then.kappa is None else then.kappa,
        *(then.interval_95 or undefined),
        *(then.whole_night_95 or undefined),
    )
