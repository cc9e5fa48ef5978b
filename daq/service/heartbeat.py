"""Heartbeat: a sign of life every few minutes, given only while the sequencer itself moves on."""

from __future__ import annotations

import logging
import time
import urllib.error
import urllib.request
from collections.abc import Callable

from daq.service.settings import Heartbeat, with_secrets

log = logging.getLogger(__name__)

GRACE_S = 300.0
TIMEOUT_S = 10.0


class Pulse:
    """When the sequencer last moved on; no timer vouches for it."""

    def __init__(self, now_s: Callable[[], float] = time.monotonic) -> None:
        self._now_s = now_s
        self._last_s = now_s()
        self._longest_s = 0.0

    def beat(self) -> None:
        """Note that it moves on."""
        self._last_s = self._now_s()

    def expect(self, longest_s: float) -> None:
        """Allow for visits that are as long as that."""
        self._longest_s = longest_s

    @property
    def lives(self) -> bool:
        """Whether it has moved on lately."""
        return self._now_s() - self._last_s <= GRACE_S + 2 * self._longest_s


def send_heartbeat(heartbeat: Heartbeat, pulse: Pulse) -> bool:
    """Send one sign of life when the sequencer lives; return whether it arrived."""
    if not pulse.lives:
        log.error("the sequencer has not moved on: no sign of life is sent")
        return False
    headers = {"Authorization": f"Bearer {with_secrets(heartbeat.token)}"} if heartbeat.token else {}
    request = urllib.request.Request(heartbeat.address, data=b"", headers=headers, method="POST")
    try:
        with urllib.request.urlopen(request, timeout=TIMEOUT_S):
            return True
    except (urllib.error.URLError, OSError) as error:
        log.warning("the heartbeat did not arrive: %s", error)
        return False
