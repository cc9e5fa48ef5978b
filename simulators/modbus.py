"""Modbus: a simulated sensor whose quantities stand in input registers.

Registers 0 and 1 hold the temperature in units of 0.01 K (unsigned) and of 0.01 degrees Celsius (signed),
registers 2 and 3 the pressure [Pa] as a 32-bit float. Any other register is an illegal data address (2), any
other question than for input registers an illegal function (1).
"""

from __future__ import annotations

import struct

from daq.ports import Clock
from simulators.hosts import Send, Session
from simulators.motion import NS
from simulators.sensors import pressure_pa, temperature_k

_HEAD = struct.Struct(">HHHB")
_READ_INPUT = 4
_CELSIUS_K = 273.15


class ModbusRoom:
    """The room's temperature and pressure; `numbered` as over TCP, else with a CRC as on a serial line."""

    def __init__(self, clock: Clock, numbered: bool = True, unit: int = 1) -> None:
        self.unit, self.numbered = unit, numbered
        self._clock = clock

    def session(self, send: Send) -> Session:
        """Return a session; the sensor never speaks unasked."""
        return _ModbusSession(self)

    def answer(self, question: bytes) -> bytes:
        """Return the answer to a question, without its frame."""
        function, at, many = struct.unpack(">BHH", question)
        if function != _READ_INPUT:
            return bytes([function | 0x80, 1])
        registers = self._registers()
        data = registers[2 * at : 2 * (at + many)]
        if not many or len(data) < 2 * many:
            return bytes([function | 0x80, 2])
        return bytes([function, len(data)]) + data

    def _registers(self) -> bytes:
        now_s = self._clock.now_ns() / NS
        kelvin = temperature_k(now_s)
        return struct.pack(
            ">Hhf", round(100 * kelvin), round(100 * (kelvin - _CELSIUS_K)), pressure_pa(now_s)
        )


class _ModbusSession:
    def __init__(self, room: ModbusRoom) -> None:
        self._room, self._rest = room, b""

    def feed(self, data: bytes) -> bytes:
        self._rest += data
        return self._numbered() if self._room.numbered else self._checked()

    def _numbered(self) -> bytes:
        answers = b""
        while len(self._rest) >= _HEAD.size + 5:
            number, protocol, _, unit = _HEAD.unpack(self._rest[: _HEAD.size])
            question, self._rest = self._rest[_HEAD.size : _HEAD.size + 5], self._rest[_HEAD.size + 5 :]
            if unit == self._room.unit:
                answer = self._room.answer(question)
                answers += _HEAD.pack(number, protocol, len(answer) + 1, unit) + answer
        return answers

    def _checked(self) -> bytes:
        frame, self._rest = self._rest[:8], self._rest[8:]
        if len(frame) < 8:
            self._rest = frame
            return b""
        if crc16(frame[:6]) != frame[6:] or frame[0] != self._room.unit:
            return b""  # as on a line: who is not meant, or did not understand, says nothing
        answer = frame[:1] + self._room.answer(frame[1:6])
        return answer + crc16(answer)


def crc16(data: bytes) -> bytes:
    """Return the CRC as it is sent, by long division (the driver's is a library's)."""
    rest = 0xFFFF
    for bit in (byte >> place & 1 for byte in data for place in range(8)):
        rest = rest >> 1 ^ 0xA001 * ((rest ^ bit) & 1)
    return struct.pack("<H", rest)
