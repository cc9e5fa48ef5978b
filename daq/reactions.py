"""Reactions: what is done about a fault, as a table; limits are elapsed time, never a number of tries."""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum


class Action(Enum):
    """What the service does about a fault."""

    REPEAT_STAND = "repeat the stand"
    RECONNECT = "close and open the links, then repeat the stand"
    PARK = "park and end"


@dataclass(frozen=True, slots=True)
class Reaction:
    """An action, how long it may go on, and the waits between tries [s]; the last wait is repeated."""

    action: Action
    limit_s: float
    waits_s: tuple[float, ...] = (0.0,)


TABLE: dict[str, Reaction] = {
    "timeout": Reaction(Action.RECONNECT, 1800.0, (0.0, 1.0, 2.0, 5.0, 10.0, 30.0, 60.0)),
    "lost": Reaction(Action.RECONNECT, 1800.0, (0.0, 1.0, 2.0, 5.0, 10.0, 30.0, 60.0)),
    "garbage": Reaction(Action.REPEAT_STAND, 600.0, (0.0, 1.0, 5.0)),
    "refused": Reaction(Action.PARK, 0.0),
}


def reaction(kind: str, tries: int, elapsed_s: float) -> tuple[Action, float]:
    """Return what to do about a fault, and how long to wait before.

    Parameters
    ----------
    kind
        Kind of the DeviceError: "timeout", "lost", "garbage" or "refused".
    tries
        How often it has been tried since the last good visit, from 0.
    elapsed_s
        Run time since the last good visit [s].
    """
    entry = TABLE.get(kind, TABLE["refused"])
    if elapsed_s > entry.limit_s or entry.action is Action.PARK:
        return Action.PARK, 0.0
    return entry.action, entry.waits_s[min(tries, len(entry.waits_s) - 1)]
