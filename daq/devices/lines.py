"""Lines: a byte stream cut into lines, every wait with a deadline on the run clock.

It keeps account of the replies that are owed: one that did not come in time may come later, and then looks
like the reply to another question.
"""

from __future__ import annotations

import logging
import re

from daq.errors import DeviceError
from daq.ports import Clock, Connection

log = logging.getLogger(__name__)

CHECK = "Check power and cable of the device, then go on with `tercet run --resume RUN`"

_CHUNK, _BLOCK = 65536, 1 << 20


class Lines:
    """The bytes of one connection.

    Parameters
    ----------
    clock
        The run clock.
    connection
        The open stream.
    end
        What ends a line from the device.
    most_bytes
        No line is longer.
    where
        Device and address, for messages.
    ignore
        A pattern for whole lines that are no replies, and are passed over.

    Attributes
    ----------
    rest
        What came with the last line, behind its end.
    """

    def __init__(
        self,
        clock: Clock,
        connection: Connection,
        end: bytes,
        most_bytes: int,
        where: str,
        ignore: str | None = None,
    ) -> None:
        self._clock, self._connection, self._where = clock, connection, where
        self._end, self._most_bytes = end, most_bytes
        self._ignore = None if ignore is None else re.compile(ignore.encode("ascii"))
        self.rest = b""
        # Two counters, since one thread may send (a stop) while another reads.
        self._asked, self._came, self._asked_ns = 0, 0, 0

    def send(self, data: bytes, replies: int = 1) -> None:
        """Write all bytes at once; `replies` may come to them. Raises DeviceError "lost"."""
        log.debug("%s < %r", self._where, data)
        self.owe(replies)
        try:
            self._connection.send(data)
        except OSError as error:
            raise self._lost(str(error)) from error

    def owe(self, replies: int) -> None:
        """Expect that so many replies may come to what is sent now, or was sent by somebody before."""
        self._asked_ns = self._clock.now_ns()
        self._asked += replies

    def close(self) -> None:
        """Let the connection go."""
        self._connection.close()

    def line(self, until_ns: int, asked: str) -> str:
        """Return the next line without its end; `asked` is what it answers, for the message.

        Raises
        ------
        DeviceError
            "timeout" when no whole line has come by `until_ns`, "garbage" for one that is too long or no
            ASCII, "lost" at the end of the stream.
        """
        line = self._next(until_ns, asked)
        while self._ignore and self._ignore.fullmatch(line):
            line = self._next(until_ns, asked)
        self._came += 1
        log.debug("%s > %r", self._where, line)
        if len(line) > self._most_bytes or not line.isascii():
            raise self._garbage(f"{line[:40]!r} in reply to {asked!r}")
        return line.decode("ascii")

    def _next(self, until_ns: int, asked: str) -> bytes:
        while self._end not in self.rest:
            if len(self.rest) > self._most_bytes:
                raise self._garbage(f"a reply without end to {asked!r}: {self.rest[:40]!r} ...")
            if not self._readable(until_ns):
                raise self._timeout(asked)
            self.rest += self._receive()
        line, _, self.rest = self.rest.partition(self._end)
        return line

    def block(self, until_ns: int, asked: str, most_bytes: int) -> bytes:
        """Return the payload of a block of known length; it may hold anything, ends of line too.

        Raises
        ------
        DeviceError
            "garbage" for what is no such block (one of unknown length is none) or is too long.

        References
        ----------
        .. [1] IEEE 488.2, sect. 8.7.9, definite length arbitrary block response data.
        """
        head = self._exactly(2, until_ns, asked)
        if head[:1] != b"#" or head[1:] not in b"123456789":
            raise self._garbage(
                f"{head + self.rest[:40]!r} and no block of known length in reply to {asked!r}"
            )
        length = self._exactly(int(head[1:]), until_ns, asked)
        if not length.isdigit() or int(length) > most_bytes:
            raise self._garbage(f"a block of length {length!r} in reply to {asked!r}")
        payload = self._exactly(int(length), until_ns, asked)
        if self._exactly(len(self._end), until_ns, asked) != self._end:
            raise self._garbage(f"a block that does not end where it says in reply to {asked!r}")
        self._came += 1
        return payload

    def _exactly(self, size: int, until_ns: int, asked: str) -> bytes:
        data = bytearray(self.rest)
        while len(data) < size:
            chunk = self._receive(_BLOCK)
            if not chunk and not self._readable(until_ns):
                self.rest = bytes(data)
                raise self._timeout(asked)
            data += chunk
        self.rest = bytes(data[size:])
        return bytes(data[:size])

    def waiting(self) -> bytes:
        """Return, and so drop, what has come unasked, without waiting for more."""
        dropped, self.rest = self.rest, b""
        while data := self._receive():
            dropped += data
        dropped = self._meant(dropped)
        self._came += dropped.count(self._end)
        return dropped

    def behind(self) -> bytes:
        """Return what came with the last line, without what is passed over; it stays where it is."""
        return self._meant(self.rest)

    def _meant(self, data: bytes) -> bytes:
        if not self._ignore:
            return data
        *lines, rest = data.split(self._end)
        return b"".join(line + self._end for line in lines if not self._ignore.fullmatch(line)) + rest

    def drain(self, quiet_ns: int, late_ns: int, most_ns: int) -> bytes:
        """Return, and so drop, what comes until all replies have come that may come.

        Parameters
        ----------
        quiet_ns
            So long nothing has come at the end.
        late_ns
            No reply comes later than this after its question.
        most_ns
            The device has to fall silent after this.

        Raises
        ------
        DeviceError
            "garbage" when it does not, "lost" at the end of the stream.
        """
        dropped, give_up_ns = self.waiting(), self._clock.now_ns() + most_ns
        while self._readable(self._silent_ns(quiet_ns, late_ns)):
            dropped += self.waiting()
            if self._clock.now_ns() > give_up_ns:
                raise self._garbage("the device does not fall silent")
        self._came = self._asked
        return dropped

    def _silent_ns(self, quiet_ns: int, late_ns: int) -> int:
        quiet_until_ns = self._clock.now_ns() + quiet_ns
        if self._came >= self._asked:
            return quiet_until_ns
        return max(quiet_until_ns, self._asked_ns + late_ns)

    def _readable(self, until_ns: int) -> bool:
        try:
            return self._clock.wait_readable(self._connection, until_ns)
        except OSError as error:
            raise self._lost(str(error)) from error

    def _receive(self, most: int = _CHUNK) -> bytes:
        try:
            data = self._connection.recv(most)
        except BlockingIOError:
            return b""
        except OSError as error:
            raise self._lost(str(error)) from error
        if not data:
            raise self._lost("the device has closed the link")
        return data

    def _timeout(self, asked: str) -> DeviceError:
        what = f"only {self.rest!r}" if self.rest else "nothing"
        return DeviceError(
            f"{what} came in reply to {asked!r} in time", where=self._where, remedy=CHECK, kind="timeout"
        )

    def _garbage(self, what: str) -> DeviceError:
        remedy = "Check the line settings, the cable's shield and that the right device stands at the address"
        return DeviceError(what, where=self._where, remedy=remedy, kind="garbage")

    def _lost(self, what: str) -> DeviceError:
        return DeviceError(f"link lost: {what}", where=self._where, remedy=CHECK, kind="lost")
