"""Spoken: a device behind a dialect file; renders commands, reads replies, knows what a refusal is."""

from __future__ import annotations

import re
from collections.abc import Mapping

from daq.description.device import DeviceEntry
from daq.description.speech import Command
from daq.devices.links import Link
from daq.devices.wire import Wire
from daq.errors import DeviceError
from daq.ports import Clock

NOT_A_NUMBER, INFINITE = 9.91e37, 9.9e37  # SCPI-1999, vol. 1, sect. 7.2.1


class Spoken:
    """One conversation in a dialect.

    Parameters
    ----------
    name
        The device in the rig.
    entry
        Its address and dialect.
    clock
        The run clock.
    """

    def __init__(self, name: str, entry: DeviceEntry, clock: Clock) -> None:
        assert entry.dialect is not None
        self.dialect, self.link = entry.dialect, Link(clock, entry.address, wire_of(entry), name)
        self._name = name

    def open(self) -> None:
        """Open the link, ask the identity."""
        self.link.open()

    def ask(self, name: str, **fields: str) -> re.Match[str]:
        """Return the reply to a command; a silent command is confirmed in the same write.

        Raises
        ------
        DeviceError
            "refused" when the device says so, or when the confirmation is not good; and as `Link.ask`.
        """
        command = self.dialect.command[name]
        if command.reply is None:
            return self._confirmed(command, fields)
        reply = self.link.ask(
            rendered(command.send, fields),
            self._pattern(rendered_pattern(command.reply, fields)),
            safe_to_repeat=command.safe_to_repeat,
        )
        if reply["refused"] is not None:
            raise self._refused(command, reply["refused"])
        return reply

    def tell(self, name: str, **fields: str) -> None:
        """Send a command whose reply nobody awaits."""
        self.link.tell(rendered(self.dialect.command[name].send, fields))

    def bytes_of(self, name: str, **fields: str) -> bytes:
        """Return a command as it is written to the device."""
        return (rendered(self.dialect.command[name].send, fields) + self.dialect.link.send_end).encode(
            "ascii"
        )

    def holds(self, name: str, condition: str, reply: re.Match[str]) -> bool:
        """Return whether a reply fulfils a condition of its command; one that is not given never holds."""
        when = self.dialect.command[name].conditions().get(condition)
        return when is not None and when.holds(reply)

    def _confirmed(self, command: Command, fields: Mapping[str, str]) -> re.Match[str]:
        confirm = self.dialect.confirm
        assert confirm is not None
        text = f"{rendered(command.send, fields)}{self.dialect.link.send_end}{confirm.send}"
        reply = self.link.ask(text, confirm.reply, safe_to_repeat=command.safe_to_repeat)
        if not confirm.good_when.holds(reply):
            raise self._refused(command, reply[0])
        return reply

    def _pattern(self, reply: str) -> str:
        refusals = "|".join(f"(?:{refusal})" for refusal in self.dialect.refusals)
        return f"(?:{reply})|(?P<refused>{refusals or '(?!)'})"

    def _refused(self, command: Command, text: str) -> DeviceError:
        remedy = "Look at the device, then mend the order or the dialect file"
        return DeviceError(f"it refused {command.send!r}: {text}", where=self._name, remedy=remedy)


def wire_of(entry: DeviceEntry) -> Wire:
    """Return how a device in a dialect speaks."""
    assert entry.dialect is not None
    speech, identity = entry.dialect.link, entry.dialect.identity
    return Wire(
        identity=identity.send,
        identity_reply=identity.reply,
        send_end=speech.send_end,
        reply_end=speech.reply_end,
        timeout_s=entry.timeout_s,
        quiet_s=speech.quiet_s,
        late_s=speech.late_s,
        most_bytes=speech.most_bytes,
        repeats=speech.repeats,
        ignore=speech.ignore,
    )


def rendered(text: str, fields: Mapping[str, str]) -> str:
    """Return a command with its fields put in."""
    for name, value in fields.items():
        text = text.replace(f"{{{name}}}", value)
    return text


def rendered_pattern(pattern: str, fields: Mapping[str, str]) -> str:
    """Return a reply pattern for one axis."""
    return pattern.replace("{letter}", re.escape(fields.get("letter", "")))


def number(text: str) -> float:
    """Return the number of a reply; SCPI's marks for what is no number become NaN and infinity."""
    value = float(text)
    if value == NOT_A_NUMBER:
        return float("nan")
    return float("inf") * (1 if value > 0 else -1) if abs(value) == INFINITE else value
