"""Turns: what only a person may do at the bench, with the cautions that belong to it."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import replace

from daq.description.by_hand import Dial
from daq.errors import DaqError
from daq.tasks.contract import Ask, Knob, Turn

CAUTIONS: dict[Knob, str] = {
    "detector": (
        "CAUTION: high voltage can injure and kill, and too much of it, or of light, destroys a detector. "
        "Set it only if you are qualified (where required, licensed) and released for it, slowly, within the "
        "limits of its maker, with covers and interlocks in place. Local safety rules come before this text; "
        "the program switches nothing here and is no safety device."
    ),
    "attenuator": (
        "CAUTION: a beam that is less attenuated can injure eyes and skin and destroy the detector. Shut the "
        "source off or block it by hardware before you reach into the beam, wear what your local rules and "
        "your laser safety officer ask for, and open it again only when your hands are out."
    ),
    "room light": (
        "CAUTION: room light on an open detector under voltage can destroy it. Go on only if its maker "
        "allows this much light and local rules do; shut the light out at once when the rate runs away."
    ),
}


def set_detector(dial: Dial, value: float) -> Turn:
    """Return the turn of a detector's dial to a value."""
    text = f"Set the detector's {dial.what} to {value:g} {dial.unit}."
    return Turn("detector", value, text, CAUTIONS["detector"])


def put_attenuator(share: float) -> Turn:
    """Return the turn to an attenuator, before monitor and mask, that lets a share of the light through."""
    what = "Take every attenuator out" if share == 1.0 else f"Put the attenuator of {share:g} in"
    return Turn("attenuator", share, f"{what}, before monitor and mask.", CAUTIONS["attenuator"])


def light_room(lit: bool) -> Turn:
    """Return the turn of the room's light."""
    how = "on, as bright as it may be at night" if lit else "off, and leave the room as it is at night"
    return Turn("room light", float(lit), f"Switch the room light {how}.", CAUTIONS["room light"])


def by_nobody(turn: Turn) -> Turn:
    """Refuse a turn where nobody is at the bench: it must not pass for done."""
    raise DaqError(f"nobody is there to do this: {turn.text}")


def told_once(asks: Iterable[Ask]) -> list[Ask]:
    """Return visits in which a knob is turned only to where it does not stand, and cautioned of at first."""
    stands: dict[Knob, float] = {}
    found = []
    for ask in asks:
        turn = ask.turn
        if turn is not None and turn.knob in stands:
            again = stands[turn.knob] == turn.value
            found.append(replace(ask, turn=None if again else replace(turn, caution="")))
        else:
            found.append(ask)
        if turn is not None:
            stands[turn.knob] = turn.value
    return found
