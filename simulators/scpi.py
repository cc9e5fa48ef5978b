"""SCPI: how a simulated instrument reads program messages.

References
----------
.. [1] IEEE 488.2, program message syntax and common commands.
.. [2] SCPI-1999, vol. 1 (syntax and style) and vol. 2, sect. 21.8 (errors).
"""

from __future__ import annotations

import itertools
import re
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import lru_cache
from typing import Any

ERRORS: Mapping[int, str] = {
    0: "No error",
    -101: "Invalid character",
    -104: "Data type error",
    -108: "Parameter not allowed",
    -109: "Missing parameter",
    -113: "Undefined header",
    -213: "Init ignored",
    -221: "Settings conflict",
    -222: "Data out of range",
    -230: "Data corrupt or stale",
    -350: "Queue overflow",
}

_NUMBER = re.compile(r"[+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?")
_UNIT = re.compile(r"""(?:[^;"']|"[^"]*"|'[^']*')+|["']""")
_NODE = re.compile(r"(\[)?:?([A-Za-z]+)\]?")


class FaultError(Exception):
    """An entry for the error queue."""

    def __init__(self, number: int) -> None:
        super().__init__(ERRORS[number])
        self.number = number


@dataclass(frozen=True, slots=True)
class Command:
    """What a header does, and how each of its parameters is read."""

    function: Callable[..., str | None]
    parameters: tuple[Callable[[str], Any], ...] = ()


class Interpreter:
    """Program messages in, response messages out.

    Parameters
    ----------
    commands
        Header as the standards print it (``SYSTem:ERRor[:NEXT]?``) -> command.
    report
        Takes the number of every error.
    """

    def __init__(self, commands: Mapping[str, Command], report: Callable[[int], None]) -> None:
        self._report = report
        self._commands = {way: command for header, command in commands.items() for way in spellings(header)}
        self.responses: list[str] = []

    def answer(self, message: str) -> str | None:
        """Return the response to one program message, or None when there is none.

        A command error ends the message, for the rest of it is not understood; an execution error does not.
        """
        self.responses = []
        path = ""
        try:
            for unit in _units(message):
                path = self._obey(unit, path)
        except FaultError as fault:
            self._report(fault.number)
        return ";".join(self.responses) or None

    def _obey(self, unit: str, path: str) -> str:
        """Carry out one message unit and return the path for a header without a leading colon."""
        written, *rest = unit.split(maxsplit=1)
        common = written.startswith("*")
        header = _full(written.upper(), "" if common else path)
        if header not in self._commands:
            raise FaultError(-113)
        self._run(self._commands[header], [text.strip() for text in rest[0].split(",")] if rest else [])
        return path if common else header.rpartition(":")[0]

    def _run(self, command: Command, given: list[str]) -> None:
        wanted = len(command.parameters)
        if len(given) != wanted:
            raise FaultError(-109 if len(given) < wanted else -108)
        try:
            values = [read(text) for read, text in zip(command.parameters, given, strict=True)]
            response = command.function(*values)
        except FaultError as fault:
            if fault.number > -200:
                raise
            self._report(fault.number)
            return
        if response is not None:
            self.responses.append(response)


def decimal(text: str) -> float:
    """Return the number that a decimal parameter holds; anything else is a data type error."""
    if not _NUMBER.fullmatch(text):
        raise FaultError(-104)
    return float(text)


def spellings(header: str) -> set[str]:
    """Return every way to write a header, in capitals: short and long forms, with and without [nodes]."""
    if header.startswith("*"):
        return {header}
    query = "?" if header.endswith("?") else ""
    nodes = [_node(name, bool(optional)) for optional, name in _NODE.findall(header)]
    return {":".join(filter(None, way)) + query for way in itertools.product(*nodes)}


def _node(name: str, optional: bool) -> set[str]:
    short = "".join(letter for letter in name if letter.isupper())
    return {name.upper(), short} | ({""} if optional else set())


@lru_cache(maxsize=1024)  # a night repeats the same few messages
def _units(message: str) -> tuple[str, ...]:
    if not (message.isascii() and message.replace("\t", " ").isprintable()):
        raise FaultError(-101)
    return tuple(unit.strip() for unit in _UNIT.findall(message) if unit.strip())


def _full(header: str, path: str) -> str:
    if header.startswith(":"):
        return header[1:]
    return f"{path}:{header}" if path else header
