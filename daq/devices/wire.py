"""Wire: how a device speaks, before anybody knows what it says."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Wire:
    """How a device speaks: its identity, the ends of a line, limits and waiting times.

    The identity is IEEE 488.2's by default: four fields between commas. `late_s` is how late a reply can come
    at most, after its question; it is waited only after an upset. `ignore` is a pattern for whole lines that
    the device sends unasked and that answer nothing.
    """

    identity: str = "*IDN?"
    identity_reply: str = r"[^,]+(,[^,]+){3}"
    send_end: str = "\n"
    reply_end: str = "\n"
    timeout_s: float = 0.5
    quiet_s: float = 0.05
    late_s: float = 1.5
    most_bytes: int = 256
    repeats: int = 2  # of a command that is safe to repeat
    ignore: str | None = None
