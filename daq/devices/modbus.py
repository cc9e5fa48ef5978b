"""Modbus: registers of a sensor, over TCP (numbered questions) or a serial line (checked by a CRC).

Frames, refusals and numbers are pymodbus's; the bytes go over our own clock, virtual or real, over every kind
of link, and fail in the three ways that the rest of the program knows: its clients wait on a clock of their
own.

References
----------
.. [1] MODBUS Application Protocol Specification V1.1b3, sect. 4, 6.3, 6.4 and 7.
.. [2] MODBUS over Serial Line V1.02, sect. 6.2.2 (CRC).
"""

from __future__ import annotations

import logging
import math
from collections.abc import Mapping, Sequence

from pymodbus.client.mixin import ModbusClientMixin
from pymodbus.constants import ExcCodes
from pymodbus.exceptions import ModbusException
from pymodbus.framer import FramerRTU, FramerSocket
from pymodbus.pdu import DecodePDU, ExceptionResponse, ModbusPDU
from pymodbus.pdu.register_message import ReadHoldingRegistersRequest, ReadInputRegistersRequest

from daq.description.device import DeviceEntry, Register
from daq.description.rig import Rig
from daq.devices.lines import CHECK
from daq.devices.locks import Hold, hold
from daq.errors import DeviceError
from daq.ports import Clock, Connection

logging.getLogger("pymodbus.logging").setLevel(logging.CRITICAL)  # what it notes, we raise

_Type = ModbusClientMixin.DATATYPE
_KINDS = {
    "u16": _Type.UINT16,
    "i16": _Type.INT16,
    "u32": _Type.UINT32,
    "i32": _Type.INT32,
    "f32": _Type.FLOAT32,
}
_QUESTIONS: Mapping[str, type[ModbusPDU]] = {
    "holding": ReadHoldingRegistersRequest,
    "input": ReadInputRegistersRequest,
}
_TRIES = 3


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
        self._framer = (FramerSocket if self._numbered else FramerRTU)(DecodePDU(is_server=False))
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
        kind = _KINDS[register.kind]
        for left in reversed(range(_TRIES)):
            try:
                words = self._asked(_QUESTIONS[register.table], register.at, kind.value[1])
                break
            except DeviceError as error:
                if not left or error.kind not in ("timeout", "garbage"):
                    raise
        value = ModbusClientMixin.convert_from_registers(words, kind)
        assert isinstance(value, int | float)
        return math.fsum((register.offset, register.factor * value)) if math.isfinite(value) else math.nan

    def _asked(self, question: type[ModbusPDU], at: int, many: int) -> Sequence[int]:
        """Return so many registers from one on."""
        self._look_before()
        self._number = self._number % 0xFFFF + 1
        self._settled_ns = self._clock.now_ns() + round(self._entry.late_s * 1e9)
        number = self._number if self._numbered else 0
        asked = question(address=at, count=many, dev_id=self._entry.unit, transaction_id=number)
        self._send(self._framer.buildFrame(asked))
        answer = self._answer(number)
        self._settled_ns = 0
        if isinstance(answer, ExceptionResponse):
            what = f"it refused register {at}: {_why(answer.exception_code)}"
            remedy = "Compare `registers` in the rig file with the papers of the device"
            raise DeviceError(what, where=self._where, remedy=remedy, kind="refused")
        if answer.function_code != asked.function_code or len(answer.registers) != many:
            raise self._error(f"{answer} answers another question", "garbage")
        return answer.registers

    def _look_before(self) -> None:
        """Drop what nobody asked for; on a line without numbers, wait first for what may still be owed."""
        if not self._numbered:
            self._clock.sleep_until(self._settled_ns)
        while self._waiting():
            continue

    def _answer(self, number: int) -> ModbusPDU:
        """Return what comes in a sound frame of this unit and number; other bytes are passed over."""
        until_ns, data = self._clock.now_ns() + round(self._entry.timeout_s * 1e9), b""
        while True:
            connection = self._connection
            if connection is None or not self._clock.wait_readable(connection, until_ns):
                raise self._error("no whole answer came in time", "timeout")
            data += self._waiting()
            try:
                used, answer = self._framer.handleFrame(data, self._entry.unit, number)
            except ModbusException as error:
                raise self._error(f"no Modbus frame ({error.string})", "garbage") from error
            if answer is not None:
                return answer
            data = data[used:]

    def _send(self, data: bytes) -> None:
        if self._connection is None:
            raise self._error("the link is not open", "lost")
        try:
            self._connection.send(data)
        except OSError as error:
            raise self._error(f"link lost: {error}", "lost") from error

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


def _why(code: int) -> str:
    """Return the words for the code of a refusal."""
    known = {one.value for one in ExcCodes}
    return ExcCodes(code).name.replace("_", " ").lower() if code in known else f"exception {code}"
