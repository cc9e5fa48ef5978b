"""Pace: a virtual clock that keeps to the wall clock, so many times as fast, for somebody who looks on."""

from __future__ import annotations

import time
from collections.abc import Callable

from simulators.clock import VirtualClock
from simulators.motion import NS


class PacedClock(VirtualClock):
    """A virtual clock whose every jump takes its time on the wall, divided by a factor.

    Parameters
    ----------
    origin_utc_ns
        UTC at run time 0.
    times
        How much faster than the wall clock it goes.
    wall_ns, sleep
        The wall clock, and how to wait on it [s].
    """

    def __init__(
        self,
        origin_utc_ns: int,
        times: float,
        wall_ns: Callable[[], int] = time.monotonic_ns,
        sleep: Callable[[float], None] = time.sleep,
    ) -> None:
        super().__init__(origin_utc_ns)
        self._times, self._wall_ns, self._sleep = times, wall_ns, sleep
        self._begun_ns = wall_ns()

    def _passed(self, to_ns: int) -> None:
        due_ns = self._begun_ns + round(to_ns / self._times)
        self._sleep(max(due_ns - self._wall_ns(), 0) / NS)
