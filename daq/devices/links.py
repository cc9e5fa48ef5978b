"""Links: commands and replies over a byte stream, so that no reply is ever taken for another one's.

A late or doubled reply shifts every reply after it by one, and a stale "0" looks like a count. Hence: what
waits before a command belongs to nobody, so it is dropped and the identity asked until it comes back; a
reply is matched whole; a command whose reply stayed away leaves the stream in doubt, and so does whoever
writes past the queue (a stop); and a reply that stayed away is awaited, as long as it may still come,
before anything else is asked: or it would land between the next question and its answer.
"""

from __future__ import annotations

import logging
import re
import threading

from daq.devices.lines import CHECK, Lines
from daq.devices.locks import Hold, hold
from daq.devices.turns import Turn
from daq.devices.wire import Wire
from daq.errors import DeviceError, in_short, without_replies
from daq.ports import Clock

log = logging.getLogger(__name__)

_PATIENCE_NS = 60_000_000_000  # how long a thread waits for its turn on a link
_IDENTITY_TRIES = 3


class Link:
    """One device's byte stream; a context manager, open inside.

    Parameters
    ----------
    clock
        The run clock: it connects, and every deadline is on it.
    address
        As in a rig file, "tcp://host:port" for example.
    wire
        How the device speaks.
    name
        The device's name in the rig, for messages.

    Attributes
    ----------
    identity
        The identity that the device gave when it was opened first; any other is refused later.
    stale, resyncs
        Replies that were dropped because nobody had asked for them; times the stream was brought into step.
    """

    def __init__(self, clock: Clock, address: str, wire: Wire, name: str) -> None:
        self.identity, self.stale, self.resyncs = "", 0, 0
        self._clock, self._address, self._wire = clock, address, wire
        self._name, self._where = name, f"{name} on {address}"
        self._end = wire.reply_end.encode("ascii")
        self._turn, self._writing = Turn(clock), threading.Lock()
        self._lines: Lines | None = None
        self._hold: Hold | None = None
        self._urgent = 0  # how often somebody wrote past the queue ...
        self._in_step_at = -1  # ... when the stream was last known to be in step

    def __enter__(self) -> Link:
        self.open()
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def open(self) -> None:
        """Take the address, connect and ask the identity, on a link that is not open; raises DeviceError."""
        self._take_turn()
        try:
            self._open()
        finally:
            self._turn.give()

    def close(self) -> None:
        """Let the stream go, from any thread; never raises."""
        lines, self._lines = self._lines, None
        if lines is not None:
            lines.close()
        held, self._hold = self._hold, None
        if held is not None:
            held.release()

    def recover(self) -> None:
        """Close, open, and ask the identity: the cure for a lost link; raises DeviceError."""
        self.close()
        self.open()

    def ask(
        self,
        text: str,
        expect: re.Pattern[str] | str,
        timeout_s: float | None = None,
        *,
        safe_to_repeat: bool = False,
    ) -> re.Match[str]:
        """Return the match of the reply, a whole line, to one command.

        Parameters
        ----------
        text
            The command, without its end.
        expect
            Pattern for the whole reply.
        timeout_s
            How long the reply may take on the run clock [s]; the wire's own by default.
        safe_to_repeat
            Whether doing it twice does no harm: then a missing or wrong reply is asked for again.

        Raises
        ------
        DeviceError
            "timeout", "garbage" or "lost"; "refused" when a stop was written meanwhile: the command is then
            not sent, or its reply is not trusted, and it is never repeated.
        """
        urgent, tries = self._urgent, 1 + self._wire.repeats * safe_to_repeat
        timeout_s = self._wire.timeout_s if timeout_s is None else timeout_s
        self._take_turn()
        try:
            return self._ask(text, re.compile(expect), timeout_s, urgent, tries)
        finally:
            self._turn.give()

    def ask_block(self, text: str, most_bytes: int, timeout_s: float | None = None) -> bytes:
        """Return the payload of a block of known length (IEEE 488.2) that answers one command; asked once.

        Raises
        ------
        DeviceError
            As `ask`.
        """
        urgent, timeout_s = self._urgent, self._wire.timeout_s if timeout_s is None else timeout_s
        self._take_turn()
        try:
            self._begin(text, urgent)
            payload = self._opened().block(self._from_now_ns(timeout_s), text, most_bytes)
            self._end_in_step(text, urgent, b"")
            return payload
        finally:
            self._turn.give()

    def tell(self, text: str) -> None:
        """Send a command that has no reply; raises DeviceError "lost"."""
        urgent = self._urgent
        self._take_turn()
        try:
            self._step_in(urgent)
            self._write(text, urgent, replies=0)
        finally:
            self._turn.give()

    def send_now(self, data: bytes) -> None:
        """Write bytes, their end included, past every queue; from any thread.

        No command that was begun before is sent after them. Raises DeviceError "lost".
        """
        with self._writing:
            self._urgent += 1
            self._opened().send(data)

    def _ask(
        self, text: str, pattern: re.Pattern[str], timeout_s: float, urgent: int, tries: int
    ) -> re.Match[str]:
        while True:
            try:
                return self._ask_once(text, pattern, timeout_s, urgent)
            except DeviceError as error:
                tries -= 1
                if not tries or error.kind not in ("timeout", "garbage"):
                    raise
                log.warning("%s It is asked again.", in_short(without_replies(error)))

    def _ask_once(self, text: str, pattern: re.Pattern[str], timeout_s: float, urgent: int) -> re.Match[str]:
        self._begin(text, urgent)
        line = self._opened().line(self._from_now_ns(timeout_s), text)
        match = pattern.fullmatch(line)
        if match is None:
            raise self._garbage(f"{line!r} in reply to {text!r}")
        self._end_in_step(text, urgent, line.encode("ascii") + self._end)
        return match

    def _begin(self, text: str, urgent: int) -> None:
        self._step_in(urgent)
        self._in_step_at = -1
        self._write(text, urgent)

    def _end_in_step(self, text: str, urgent: int, doubled: bytes) -> None:
        """Be in step, unless a stop came between or something stands behind the reply, but for itself."""
        if self._urgent != urgent:
            raise self._stopped(text)
        lines = self._opened()
        behind = lines.behind() if lines.rest else b""
        if behind.replace(doubled, b"") if doubled else behind:
            raise self._garbage(f"{behind[:40]!r} behind the reply {doubled[:40]!r} to {text!r}")
        self._in_step_at = urgent

    def _step_in(self, urgent: int) -> None:
        unasked = self._opened().waiting()
        if unasked or self._in_step_at != urgent:
            self.resyncs += 1
            self._resync(unasked, urgent)

    def _resync(self, unasked: bytes, urgent: int) -> None:
        self._in_step_at = -1
        for left in reversed(range(_IDENTITY_TRIES)):
            self._drop(unasked + self._drain())
            self._write(self._wire.identity, urgent)
            try:
                self.identity = self._read_identity()
            except DeviceError as error:
                if not left or error.kind == "lost":
                    raise
            else:
                self._in_step_at = urgent
                return
            unasked = b""

    def _read_identity(self) -> str:
        until_ns, seen = self._from_now_ns(self._wire.timeout_s), ""
        while not self._is_identity(seen):
            try:
                line = self._opened().line(until_ns, self._wire.identity)
            except DeviceError as error:
                if error.kind != "timeout" or not seen:
                    raise
                wanted = self.identity or f"one like {self._wire.identity_reply}"
                raise self._garbage(f"the identity is {seen!r} and not {wanted}") from error
            self.stale += bool(seen)
            seen = line
        return seen

    def _is_identity(self, line: str) -> bool:
        if self.identity:
            return line == self.identity
        return re.fullmatch(self._wire.identity_reply, line) is not None

    def _open(self) -> None:
        wire = self._wire
        if self._clock.kind == "real":  # an address on a virtual clock is nobody else's
            self._hold = hold(self._address, self._name)
        try:
            connection = self._clock.connect(self._address, wire.timeout_s)
        except OSError as error:
            self.close()
            what = f"nobody answers ({error})"
            raise DeviceError(what, where=self._where, remedy=CHECK, kind="lost") from error
        self._lines = Lines(self._clock, connection, self._end, wire.most_bytes, self._where, wire.ignore)
        if self.identity:  # a serial-to-LAN box may bring what the lost connection was owed
            self._lines.owe(1)
        try:
            self._resync(b"", self._urgent)
        except DeviceError:
            self.close()
            raise

    def _write(self, text: str, urgent: int, replies: int = 1) -> None:
        data = (text + self._wire.send_end).encode("ascii")
        with self._writing:
            if self._urgent != urgent:
                raise self._stopped(text)
            self._opened().send(data, replies)

    def _drain(self) -> bytes:
        wire = self._wire
        quiet_ns, late_ns = round(wire.quiet_s * 1e9), round(wire.late_s * 1e9)
        return self._opened().drain(quiet_ns, late_ns, late_ns + round(wire.timeout_s * 1e9))

    def _drop(self, unasked: bytes) -> None:
        if unasked:
            self.stale += max(1, unasked.count(self._end))
            log.warning("%s: out of step, dropped %d bytes", self._where, len(unasked))
            log.debug("%s > %r", self._where, unasked[:80])

    def _opened(self) -> Lines:
        if self._lines is None:
            raise DeviceError("the link is not open", where=self._where, remedy=CHECK, kind="lost")
        return self._lines

    def _take_turn(self) -> None:
        if not self._turn.take(_PATIENCE_NS):
            raise DeviceError("the link is busy", where=self._where, remedy=CHECK, kind="timeout")

    def _from_now_ns(self, seconds: float) -> int:
        return self._clock.now_ns() + round(seconds * 1e9)

    def _garbage(self, what: str) -> DeviceError:
        remedy = "Check that the right device stands at the address, and the shield of its cable"
        return DeviceError(what, where=self._where, remedy=remedy, kind="garbage")

    def _stopped(self, text: str) -> DeviceError:
        what = f"a stop was sent while {text!r} was on its way"
        return DeviceError(what, where=self._where, remedy="Look at the axis, then resume", kind="refused")
