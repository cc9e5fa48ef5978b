"""Lines: cut the bytes of a connection into commands and the answers into bytes."""

from __future__ import annotations

from collections.abc import Callable

LONGEST = 4096


class LineSession:
    """One connection to an instrument that speaks in lines; its commands may come in any pieces.

    Parameters
    ----------
    answer
        Takes one command without its line end and returns its reply, or None for no reply.  Bytes that are
        not ASCII arrive as U+FFFD.  More than `LONGEST` bytes without a line end count as a command.
    """

    def __init__(self, answer: Callable[[str], str | None]) -> None:
        self._answer = answer
        self._begun = b""

    def feed(self, data: bytes) -> bytes:
        """Take bytes as they come and return the replies to the commands that they complete."""
        *lines, self._begun = (self._begun + data).split(b"\n")
        if len(self._begun) > LONGEST:
            lines, self._begun = [*lines, self._begun], b""
        answers = [self._answer(line.decode("ascii", "replace").strip("\r")) for line in lines]
        return b"".join(f"{answer}\n".encode() for answer in answers if answer is not None)
