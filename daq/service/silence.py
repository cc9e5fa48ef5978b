"""Silence: what a second machine listens for, and when it speaks up."""

from __future__ import annotations

import hmac
from collections.abc import Callable
from dataclasses import dataclass
from http.server import BaseHTTPRequestHandler, ThreadingHTTPServer


@dataclass(slots=True)
class Listener:
    """Hears signs of life; `look` returns a sentence once when they stop, and once when they are back."""

    after_s: float
    heard_s: float
    silent: bool = False

    def hear(self, now_s: float) -> None:
        """Note a sign of life."""
        self.heard_s = now_s

    def look(self, now_s: float) -> str:
        """Return what has to be said now, or nothing."""
        quiet_s = now_s - self.heard_s
        if quiet_s > self.after_s and not self.silent:
            self.silent = True
            return (
                f"No word from the run for {quiet_s / 60:.0f} min. I do not know whether it is running. "
                "Look at the page, at the computer at the bench and at the network between."
            )
        if quiet_s <= self.after_s and self.silent:
            self.silent = False
            return "There is word from the run again."
        return ""


def listening(
    host: str, port: int, token: str, listener: Listener, now_s: Callable[[], float]
) -> ThreadingHTTPServer:
    """Return a server that takes signs of life from whoever knows the token."""

    class Handler(BaseHTTPRequestHandler):
        timeout = 10

        def do_POST(self) -> None:
            given = self.headers.get("Authorization", "")
            if not hmac.compare_digest(given.encode(), f"Bearer {token}".encode() if token else b""):
                self.send_error(401)
                return
            listener.hear(now_s())
            self.send_response(204)
            self.end_headers()

        def log_message(self, format: str, *args: object) -> None:
            """Say nothing: a heartbeat every few minutes is no news."""

    return ThreadingHTTPServer((host, port), Handler)
