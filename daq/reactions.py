"""Reactions: what is done about a fault, as a table; limits are elapsed time, never a number of tries."""

from __future__ import annotations

from dataclasses import dataclass
from enum import Enum
from math import inf


class Action(Enum):
    """What the service does about a fault."""

    REPEAT_STAND = "repeat the stand"
    RECONNECT = "close and open the links, then repeat the stand"
    HOLD = "hold, and go on by itself when the cause is gone and has stayed away"
    HOLD_AT_BENCH = "stop the stages, shut the beam out, hold until a person at the bench clears it"
    PARK = "park and end"


@dataclass(frozen=True, slots=True)
class Reaction:
    """An action, how long it may go on, and the waits between tries [s]; the last wait is repeated.

    After `slow_after_s` the waits are `slow_s`: what has not come back by then comes back slowly.
    """

    action: Action
    limit_s: float
    waits_s: tuple[float, ...] = (0.0,)
    slow_after_s: float = inf
    slow_s: float = 300.0


_LINK = Reaction(Action.RECONNECT, 4 * 3600.0, (0.0, 1.0, 2.0, 5.0, 10.0, 30.0, 60.0), 1800.0)
_BENCH = Reaction(Action.HOLD_AT_BENCH, 2 * 3600.0)

TABLE: dict[str, Reaction] = {
    "timeout": _LINK,
    "lost": _LINK,
    "garbage": Reaction(Action.REPEAT_STAND, 600.0, (0.0, 1.0, 5.0)),
    "refused": Reaction(Action.REPEAT_STAND, 20.0, (0.0, 5.0)),
    "alarm": _BENCH,
    "reference": _BENCH,
    "overload": _BENCH,
    "interlock": _BENCH,
    "labels": _BENCH,
    "flank": _BENCH,
    "sensor": Reaction(Action.HOLD, 2 * 3600.0),
    "no counts": Reaction(Action.REPEAT_STAND, 2 * 3600.0, (60.0, 120.0, 300.0)),
    "room": Reaction(Action.HOLD, inf),
    "forbidden": Reaction(Action.PARK, 0.0),
}


def reaction(kind: str, tries: int, elapsed_s: float) -> tuple[Action, float]:
    """Return what to do about a fault, and how long to wait before.

    Parameters
    ----------
    kind
        Kind of the DeviceError, or what else is the matter: a row of `TABLE`.
    tries
        How often it has been tried since the last good visit, from 0.
    elapsed_s
        Run time since the first fault after the last good visit [s].
    """
    entry = TABLE.get(kind, TABLE["forbidden"])
    if elapsed_s > entry.limit_s or entry.action is Action.PARK:
        return Action.PARK, 0.0
    if elapsed_s > entry.slow_after_s:
        return entry.action, entry.slow_s
    return entry.action, entry.waits_s[min(tries, len(entry.waits_s) - 1)]
