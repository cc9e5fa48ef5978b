"""Modbus: registers of a sensor, over TCP (numbered questions) or a serial line (checked by a CRC).

Written here and not taken from a library, because it then runs on the run clock, virtual or real, over every
kind of link, and fails in the three ways that the rest of the program knows.

References
----------
.. [1] MODBUS Application Protocol Specification V1.1b3, sect. 4, 6.3, 6.4 and 7; from memory.
.. [2] MODBUS over Serial Line V1.02, sect. 6.2.2 (CRC).
"""

from __future__ import annotations

import math
import struct
from collections.abc import Mapping, Sequence

from daq.description.rig import DeviceEntry, Register, Rig
from daq.devices.lines import CHECK
from daq.devices.locks import Hold, hold
from daq.errors import DeviceError
from daq.ports import Clock, Connection

_FUNCTIONS = {"holding": 3, "input": 4}
_FORMATS = {"u16": ">H", "i16": ">h", "u32": ">I", "i32": ">i", "f32": ">f"}
_EXCEPTIONS = {1: "illegal function", 2: "illegal data address", 3: "illegal data value", 4: "device failure"}
_TRIES = 3
_HEAD = struct.Struct(">HHHB")  # number, protocol, length, unit


class ModbusSensor:
    """A sensor whose quantities stand in registers.

    Parameters
    ----------
    name
        The device in the rig.
    entry
        Its address, unit, and registers.
    clock
        The run clock.
    """

    port = "sensor"

    def __init__(self, name: str, entry: DeviceEntry, clock: Clock) -> None:
        self.name, self.every_s = name, entry.every_s
        self._entry, self._clock = entry, clock
        self._where = f"{name} on {entry.address}"
        self._connection: Connection | None = None
        self._hold: Hold | None = None
        self._numbered = entry.address.startswith("tcp:")
        self._number, self._settled_ns = 0, 0

    @classmethod
    def of_rig(cls, name: str, rig: Rig, clock: Clock) -> Sequence[ModbusSensor]:
        """Return the sensor of a rig."""
        return (cls(name, rig.devices[name], clock),)

    def open(self) -> None:
        """Connect and read every register once: Modbus has no identity that every device gives."""
        if self._clock.kind == "real":
            self._hold = hold(self._entry.address, self.name)
        try:
            self._connection = self._clock.connect(self._entry.address, self._entry.timeout_s)
            self.read()
        except OSError as error:
            self.close()
            raise self._error(f"nobody answers ({error})", "lost") from error
        except DeviceError:
            self.close()
            raise

    def close(self) -> None:
        """Let the link go; never raises."""
        connection, self._connection = self._connection, None
        if connection is not None:
            connection.close()
        held, self._hold = self._hold, None
        if held is not None:
            held.release()

    def identity(self) -> str:
        """Return which unit it is, and what was read of it."""
        return f"modbus unit {self._entry.unit}, {', '.join(self._entry.registers)}"

    def read(self) -> Mapping[str, tuple[float, str]]:
        """Return name -> (value, unit); asked again after an upset, for reading changes nothing."""
        return {name: (self._quantity(one), one.unit) for name, one in self._entry.registers.items()}

    def _quantity(self, register: Register) -> float:
        form = _FORMATS[register.kind]
        question = struct.pack(">BHH", _FUNCTIONS[register.table], register.at, struct.calcsize(form) // 2)
        for left in reversed(range(_TRIES)):
            try:
                data = self._asked(question)
                break
            except DeviceError as error:
                if not left or error.kind not in ("timeout", "garbage"):
                    raise
        if len(data) != struct.calcsize(form):
            raise self._error(f"{len(data)} bytes for a register of {struct.calcsize(form)}", "garbage")
        (value,) = struct.unpack(form, data)
        return math.fsum((register.offset, register.factor * value)) if math.isfinite(value) else math.nan

    def _asked(self, question: bytes) -> bytes:
        """Return the data behind the answer to one question."""
        self._look_before()
        self._number = self._number % 0xFFFF + 1
        unit, until_ns = self._entry.unit, self._clock.now_ns() + round(self._entry.timeout_s * 1e9)
        self._settled_ns = self._clock.now_ns() + round(self._entry.late_s * 1e9)
        self._send(framed(question, unit, self._number if self._numbered else None))
        answer = self._numbered_answer(until_ns) if self._numbered else self._checked_answer(until_ns)
        self._settled_ns = 0
        if answer[0] == question[0] | 0x80:
            why = _EXCEPTIONS.get(answer[1], f"exception {answer[1]}")
            raise self._error(
                f"it refused register {struct.unpack('>H', question[1:3])[0]}: {why}", "refused"
            )
        if answer[0] != question[0] or answer[1] != len(answer) - 2:
            raise self._error(f"{answer[:20]!r} answers another question", "garbage")
        return answer[2:]

    def _look_before(self) -> None:
        """Drop what nobody asked for; on a line without numbers, wait first for what may still be owed."""
        if not self._numbered:
            self._clock.sleep_until(self._settled_ns)
        while self._waiting():
            continue

    def _numbered_answer(self, until_ns: int) -> bytes:
        while True:
            number, protocol, length, unit = _HEAD.unpack(self._exactly(_HEAD.size, until_ns))
            if protocol or not 3 <= length <= 254:
                raise self._error("no Modbus frame", "garbage")
            answer = self._exactly(length - 1, until_ns)
            if (number, unit) == (self._number, self._entry.unit):
                return answer  # any other answers a question whose time is over

    def _checked_answer(self, until_ns: int) -> bytes:
        head = self._exactly(3, until_ns)
        size = 2 if head[1] & 0x80 else 2 + head[2]
        frame = head + self._exactly(size, until_ns)
        if crc16(frame[:-2]) != int.from_bytes(frame[-2:], "little") or frame[0] != self._entry.unit:
            raise self._error(f"{frame[:20]!r} is no sound frame of unit {self._entry.unit}", "garbage")
        return frame[1:-2]

    def _send(self, data: bytes) -> None:
        if self._connection is None:
            raise self._error("the link is not open", "lost")
        try:
            self._connection.send(data)
        except OSError as error:
            raise self._error(f"link lost: {error}", "lost") from error

    def _exactly(self, size: int, until_ns: int) -> bytes:
        data = b""
        while len(data) < size:
            connection = self._connection
            if connection is None or not self._clock.wait_readable(connection, until_ns):
                raise self._error("no whole answer came in time", "timeout")
            data += self._waiting(size - len(data))
        return data

    def _waiting(self, most: int = 4096) -> bytes:
        if self._connection is None:
            raise self._error("the link is not open", "lost")
        try:
            data = self._connection.recv(most)
        except BlockingIOError:
            return b""
        except OSError as error:
            raise self._error(f"link lost: {error}", "lost") from error
        if not data:
            raise self._error("link lost: the device has closed it", "lost")
        return data

    def _error(self, what: str, kind: str) -> DeviceError:
        return DeviceError(what, where=self._where, remedy=CHECK, kind=kind)


def framed(question: bytes, unit: int, number: int | None) -> bytes:
    """Return a question as it is sent: with a number, or (`number` None) with a CRC as on a serial line."""
    if number is not None:
        return _HEAD.pack(number, 0, len(question) + 1, unit) + question
    line = bytes([unit]) + question
    return line + crc16(line).to_bytes(2, "little")


def crc16(data: bytes) -> int:
    """Return the CRC of a frame on a serial line: begun with FFFF, polynomial A001 reflected."""
    crc = 0xFFFF
    for byte in data:
        crc ^= byte
        for _ in range(8):
            crc = crc >> 1 ^ (0xA001 if crc & 1 else 0)
    return crc
