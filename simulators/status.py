"""Status: the registers and the error queue of a simulated SCPI instrument.

References
----------
.. [1] IEEE 488.2, sect. 11 (status byte, standard event status register).
.. [2] SCPI-1999, vol. 1, sect. 9 (status byte), vol. 2, sect. 20 and 21 (STATus, SYSTem:ERRor).
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Mapping
from enum import IntFlag

from simulators.scpi import ERRORS, Command, FaultError, decimal

QUEUE = 16


class Event(IntFlag):
    """Bits of the standard event status register."""

    OPERATION_COMPLETE = 1
    QUERY_ERROR = 4
    DEVICE_ERROR = 8
    EXECUTION_ERROR = 16
    COMMAND_ERROR = 32
    POWER_ON = 128


class Summary(IntFlag):
    """Bits of the status byte as SCPI uses them."""

    ERROR_QUEUE = 4
    QUESTIONABLE = 8
    MESSAGE = 16
    EVENT = 32
    MASTER = 64
    OPERATION = 128


_CLASS = {1: Event.COMMAND_ERROR, 2: Event.EXECUTION_ERROR, 3: Event.DEVICE_ERROR, 4: Event.QUERY_ERROR}


class Status:
    """Registers and error queue.

    Parameters
    ----------
    operation
        Returns the condition of the operation status register.
    waiting
        Returns whether a response waits to be sent.

    Notes
    -----
    No command is overlapped, so ``*OPC?`` is 1 and ``*WAI`` is over at once. The operation event register
    latches the condition when it is looked at; transition filters are not built, and the questionable
    status register is always 0.
    """

    def __init__(self, operation: Callable[[], int], waiting: Callable[[], bool]) -> None:
        self._condition, self._waiting = operation, waiting
        self._errors: deque[int] = deque()
        self._event = Event.POWER_ON
        self._latched = 0
        self._enable = {"*ESE": 0, "*SRE": 0, "OPERation": 0, "QUEStionable": 0}

    def report(self, number: int) -> None:
        """Put an error into the queue and raise its event bit; the last place of a full queue says so."""
        self._event |= _CLASS[-number // 100]
        if len(self._errors) < QUEUE:
            self._errors.append(number)
        else:
            self._errors[-1] = -350
            self._event |= Event.DEVICE_ERROR

    def commands(self) -> Mapping[str, Command]:
        """Return the common commands and those that SCPI demands of every instrument."""
        return {
            "*CLS": Command(self._clear),
            "*ESR?": Command(self._take_event),
            "*OPC": Command(self._complete),
            "*OPC?": Command(lambda: "1"),
            "*STB?": Command(lambda: str(self._byte())),
            "*TST?": Command(lambda: "0"),
            "*WAI": Command(lambda: None),
            **self._enable_commands("*ESE", "*ESE", 255),
            **self._enable_commands("*SRE", "*SRE", 255 & ~Summary.MASTER),
            **self._group("OPERation", self._condition, self._take_latched),
            **self._group("QUEStionable", lambda: 0, lambda: "0"),
            "STATus:PRESet": Command(self._preset),
            "SYSTem:ERRor[:NEXT]?": Command(self._next_error),
            "SYSTem:VERSion?": Command(lambda: "1999.0"),
        }

    def _group(
        self, name: str, condition: Callable[[], int], event: Callable[[], str]
    ) -> Mapping[str, Command]:
        return {
            f"STATus:{name}[:EVENt]?": Command(event),
            f"STATus:{name}:CONDition?": Command(lambda: str(condition())),
            **self._enable_commands(f"STATus:{name}:ENABle", name, 32767),
        }

    def _enable_commands(self, header: str, name: str, most: int) -> Mapping[str, Command]:
        def put(value: float) -> None:
            # IEEE 488.2, sect. 11.3: bit 6 of the service request enable register is ignored
            whole = round(value)
            if not 0 <= whole <= (255 if header.startswith("*") else most):
                raise FaultError(-222)
            self._enable[name] = whole & most

        return {
            header: Command(put, (decimal,)),
            f"{header}?": Command(lambda: str(self._enable[name])),
        }

    def _byte(self) -> int:
        self._latched |= self._condition()
        byte = Summary(0)
        byte |= Summary.ERROR_QUEUE if self._errors else 0
        byte |= Summary.MESSAGE if self._waiting() else 0
        byte |= Summary.EVENT if self._event & self._enable["*ESE"] else 0
        byte |= Summary.OPERATION if self._latched & self._enable["OPERation"] else 0
        return int(byte | (Summary.MASTER if byte & self._enable["*SRE"] else 0))

    def _take_event(self) -> str:
        event, self._event = self._event, Event(0)
        return str(int(event))

    def _take_latched(self) -> str:
        latched, self._latched = self._latched | self._condition(), 0
        return str(latched)

    def _next_error(self) -> str:
        number = self._errors.popleft() if self._errors else 0
        return f'{number},"{ERRORS[number]}"'

    def _complete(self) -> None:
        self._event |= Event.OPERATION_COMPLETE

    def _clear(self) -> None:
        self._errors.clear()
        self._event, self._latched = Event(0), 0

    def _preset(self) -> None:
        self._enable |= {"OPERation": 0, "QUEStionable": 0}
