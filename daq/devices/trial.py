"""Trial: talk to a device in its dialect, asking only, and tell what was understood."""

from __future__ import annotations

from collections.abc import Iterator

from daq.description.device import DeviceEntry
from daq.description.dialect import Dialect
from daq.devices.spoken import Spoken
from daq.errors import DeviceError
from daq.ports import Clock

ASKED = ("status", "read", "fetch")  # what moves nothing


def tried(dialect: Dialect, address: str, letter: str, clock: Clock) -> Iterator[str]:
    """Yield a sentence for everything that was asked and understood; nothing is moved and no gate opened.

    Parameters
    ----------
    dialect
        How the device speaks.
    address
        Where it is, "tcp://host:port" or another address of a rig file.
    letter
        Which axis of a stage controller is asked.
    clock
        The run clock.

    Raises
    ------
    DeviceError
        When the device does not answer, or its identity is another one.
    """
    entry = DeviceEntry(driver="dialect", dialect=dialect, address=address)
    spoken = Spoken(dialect.name, entry, clock)
    with spoken.link:
        yield f"identity: {spoken.link.identity!r}"
        for name in ASKED:
            if name in dialect.command:
                yield f"{name}: {_understood(spoken, name, letter)}"


def _understood(spoken: Spoken, name: str, letter: str) -> str:
    try:
        reply = spoken.ask(name, letter=letter)
    except DeviceError as error:
        return f"not understood. {error}"
    groups = {group: text for group, text in reply.groupdict().items() if text is not None}
    conditions = spoken.dialect.command[name].conditions()
    holding = [key for key, when in conditions.items() if when.holds(reply)]
    told = ", ".join(f"{group} = {text}" for group, text in groups.items()) or "nothing to read"
    return f"{reply[0]!r}: {told}; holds: {', '.join(holding) or 'no condition'}"
