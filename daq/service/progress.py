"""Telling a person at a terminal how a run is getting on."""

from __future__ import annotations

import sys
import time
from collections.abc import Callable
from typing import TextIO

from daq.records import Reading

EVERY_S = 0.5


class Progress:
    """One line on a terminal, rewritten at most twice a second; silent when nobody is looking."""

    def __init__(
        self, planned: int, stream: TextIO | None = None, now_s: Callable[[], float] = time.monotonic
    ):
        self._planned, self._stream, self._now_s = planned, stream or sys.stderr, now_s
        self._shown_s = float("-inf")
        self._wanted = self._stream.isatty()
        self._last: Reading | None = None

    def took(self, reading: Reading) -> None:
        """Show how far the run is."""
        self._last = reading
        if self._wanted and self._now_s() - self._shown_s >= EVERY_S:
            self._show(reading)

    def _show(self, reading: Reading) -> None:
        self._shown_s = self._now_s()
        hours = reading.gate_close_ns / 3.6e12
        share = 100 * (reading.visit + 1) / self._planned
        self._stream.write(
            f"\rvisit {reading.visit + 1} of {self._planned} ({share:.0f} %), {hours:.2f} h on the run clock "
        )
        self._stream.flush()

    def done(self) -> None:
        """Show the last visit and end the line."""
        if self._wanted and self._last is not None:
            self._show(self._last)
            self._stream.write("\n")
            self._stream.flush()
