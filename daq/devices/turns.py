"""Turns: a lock whose waiters pass time on the run clock."""

from __future__ import annotations

import threading

from daq.ports import Clock


class Turn:
    """One thread at a time, on a run clock.

    A plain lock would hide its waiter from a virtual clock: time would stand, and the holder of the lock
    would wait for ever for the reply that only time can bring.
    """

    def __init__(self, clock: Clock) -> None:
        self._clock = clock
        self._lock = threading.Lock()
        self._free = clock.event()

    def take(self, patience_ns: int) -> bool:
        """Return whether the turn was taken, waiting at most for `patience_ns`."""
        return self._lock.acquire(blocking=False) or self._wait(self._clock.now_ns() + patience_ns)

    def give(self) -> None:
        """Give the turn back."""
        self._lock.release()
        self._free.set()

    def _wait(self, until_ns: int) -> bool:
        while True:
            self._free.clear()
            if self._lock.acquire(blocking=False):  # given back before the flag was lowered
                return True
            if not self._free.wait_until(until_ns):
                return False
