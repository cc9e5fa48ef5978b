"""Telling systemd that the service is ready and that its sequencer moves on; nothing outside a unit."""

from __future__ import annotations

import logging
import os
import socket
import time
from collections.abc import Callable, Mapping

log = logging.getLogger(__name__)


class Supervisor:
    """Speaks to the supervisor that a unit names; without one every call does nothing.

    Parameters
    ----------
    environment
        NOTIFY_SOCKET, WATCHDOG_USEC and WATCHDOG_PID as systemd sets them.
    """

    def __init__(
        self, environment: Mapping[str, str] = os.environ, now_s: Callable[[], float] = time.monotonic
    ) -> None:
        self._address = environment.get("NOTIFY_SOCKET", "")
        mine = environment.get("WATCHDOG_PID", str(os.getpid())) == str(os.getpid())
        self._every_s = float(environment.get("WATCHDOG_USEC", 0)) / 2e6 if mine else 0.0
        self._now_s, self._last_s = now_s, float("-inf")

    def ready(self) -> None:
        """Say that the service is up."""
        self._say("READY=1")

    def status(self, text: str) -> None:
        """Say in one line what the service does."""
        self._say(f"STATUS={text.replace(chr(10), ' ')}")

    def alive(self) -> None:
        """Say that the sequencer moves on, at most twice in a period of the watchdog."""
        if self._every_s and self._now_s() - self._last_s >= self._every_s:
            self._last_s = self._now_s()
            self._say("WATCHDOG=1")

    def _say(self, text: str) -> None:
        if not self._address:
            return
        address = "\0" + self._address[1:] if self._address.startswith("@") else self._address
        try:
            with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM | socket.SOCK_CLOEXEC) as line:
                line.sendto(text.encode(), address)
        except OSError as error:
            log.warning("the supervisor was not told %r: %s", text, error)
