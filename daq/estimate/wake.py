"""Waking: the few conditions for which a person is called at night, each with the cost of doing nothing."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import inf, sqrt

from daq.estimate.watch import STAYS_GOOD, Concern

LOSS_TO_WAKE_H = 1.5  # hours of measuring that may go missing before anybody is called
HOLD_TO_WAKE_H = 0.5
BRIEF_H = 1 / 60  # a fault that is cured within a minute is for the log
INTERLOCK_TO_WAKE_H = 10 / 60
DARK_STANDS = 2
LEVEL_STANDS = 3
LEVEL_BAND = (0.5, 1.5)
LATEST_STANDS, WRONG_SHARE = 41, 0.2
CLOSED_SIGMA, CLOSED_TIMES = 6.0, 5.0
RESTARTS_AN_HOUR = 3
HARM = ("interlock", "overload")  # holds where equipment may come to harm


@dataclass(frozen=True, slots=True)
class Held:
    """Why a run holds, since when [h], how often it has tried by itself, and who may clear it."""

    cause: str  # "asked", "room", "fault", "sensor", "interlock", "overload", "reference", "no counts"
    why: str
    hours: float = 0.0
    tries: int = 0
    at_bench: bool = False


@dataclass(frozen=True, slots=True)
class Closed:
    """Rates behind shut slits [1/s]: of the last laps, of the laps before, and the error of the latter."""

    last_hz: Sequence[float]
    before_hz: float
    before_se_hz: float


@dataclass(frozen=True, slots=True)
class Danger:
    """What the conditions for waking look at; hours are of run time."""

    left_h: float  # to the planned end
    planned_h: float
    planned_se: float | None  # the error bar that the plan ends at
    levels: Sequence[float] = ()  # of the latest stands, over the expected one
    held: Held | None = None
    dark_stands: int = 0  # in a row without light
    expected_counts: float = 0.0  # in a stand
    monitor_lives: bool | None = None
    odd_openings: Sequence[str] = ()  # of the latest stands: the opening that stands out, or nothing
    remedy_left: bool = False  # the mask may still find its reference again by itself
    closed: Closed | None = None
    restarts: int = 0  # in the last hour
    refused: str = ""  # what the disk did not take
    ended: str = ""  # why the run ended before its planned end


def dangers(danger: Danger) -> tuple[Concern, ...]:
    """Return what is worth a call, and what would be if it cost more; one concern a cause."""
    if danger.ended:
        return (_ended(danger),)
    found = [_refused(danger), _restarted(danger)]
    if danger.held is not None:
        return tuple(one for one in (_held(danger, danger.held), *found) if one is not None)
    if danger.dark_stands >= DARK_STANDS:
        found.append(_dark(danger))  # no rate, no pattern: one cause, one message
    else:
        found += [_rate(danger), _openings(danger), _closed(danger)]
    return tuple(one for one in found if one is not None)


def cost(danger: Danger, rate: float = 0.0) -> tuple[float, str]:
    """Return the hours that go missing if nothing is done, and a sentence with the error bar at the end.

    Parameters
    ----------
    rate
        Information that still comes in, over the planned one.
    """
    lost_h = danger.left_h * (1 - rate)
    share = lost_h / danger.planned_h if danger.planned_h else 0.0
    text = f"If nothing is done the run loses {lost_h:.1f} h ({100 * share:.0f} %)"
    if danger.planned_se is None or share >= 1:
        return lost_h, f"{text}."
    ends = danger.planned_se / sqrt(1 - share)
    return lost_h, f"{text} and ends at ± {ends:.2g} instead of ± {danger.planned_se:.2g}."


_DOUBT = {
    "overload": "The visits just before may be wrong: look at them before you use this run.",
    "labels": "Counts may stand under wrong openings: look at the mask, its places and orientation.",
    "flank": "Stands that did not fit are left out; look at the latest ones before you use this run.",
}


def _held(danger: Danger, held: Held) -> Concern | None:
    if held.cause == "fault" and held.hours < BRIEF_H:
        return None
    lost_h, text = cost(danger)
    costly = lost_h > LOSS_TO_WAKE_H
    wakes = {
        "asked": False,
        "room": True,
        "no counts": costly,
        "overload": True,
        "labels": True,
        "flank": costly,
        "interlock": held.hours > INTERLOCK_TO_WAKE_H,
    }.get(held.cause, held.hours > HOLD_TO_WAKE_H and costly)
    return Concern(
        "hold",
        held.why if held.cause == "asked" else f"{held.why} The run has waited {_minutes(held.hours)}.",
        _to_do(held),
        _DOUBT.get(held.cause, f"Everything counted so far is stored; {STAYS_GOOD}."),
        did=_done(held),
        cost=text,
        wakes=wakes,
        in_doubt=held.cause in _DOUBT,
    )


def _minutes(hours: float) -> str:
    return f"{60 * hours:.0f} min" if hours < 2 else f"{hours:.1f} h"


def _done(held: Held) -> str:
    if held.cause in ("fault", "no counts"):
        tried = "once" if held.tries == 1 else f"{held.tries} times"
        return f"It holds, has tried again {tried}, and goes on by itself when it succeeds."
    if held.at_bench:
        return "The stages stand still and, where there is a shutter, it was asked to shut; the run holds."
    if held.cause == "asked":
        return "The stages stand still; the run holds between two stands."
    return "The run holds and goes on by itself when this is over."


def _to_do(held: Held) -> str:
    if held.at_bench:
        return "Go and look. It is cleared at the bench only, with `tercet resume LAB --at-bench`."
    return {
        "asked": "Let it go on with `tercet resume LAB`, or end it with `tercet end LAB`.",
        "room": "Make room on the disk.",
        "no counts": "Look at the shutter, then at source and detector.",
    }.get(held.cause, "Look at the device, its power and its cable.")


def _dark(danger: Danger) -> Concern:
    lost_h, text = cost(danger)
    look = {
        None: "Look at shutter, source and detector.",
        True: "The monitor is normal: look at the detector's side.",
        False: "The monitor is dark too: look at the source and the shutter.",
    }[danger.monitor_lives]
    return Concern(
        "no-counts",
        f"No light in {danger.dark_stands} stands in a row; "
        f"{danger.expected_counts:.3g} counts are due in each.",
        look,
        f"Stands without counts are left out; {STAYS_GOOD}.",
        did="The run holds and tries the next stand from time to time.",
        cost=text,
        wakes=lost_h > LOSS_TO_WAKE_H,
    )


def _rate(danger: Danger) -> Concern | None:
    latest = list(danger.levels[-LEVEL_STANDS:])
    low, high = LEVEL_BAND
    if len(latest) < LEVEL_STANDS or not (max(latest) < low or min(latest) > high):
        return None
    level = sum(latest) / len(latest)
    lost_h, text = cost(danger, min(level, 1.0))
    return Concern(
        "rate",
        f"The count rate is {100 * level:.0f} % of the expected one in {LEVEL_STANDS} stands in a row.",
        "Look at the source; nothing has to be done for the data.",
        f"The order of measurement cancels this; {STAYS_GOOD}.",
        cost=text if level < 1 else "Nothing, as long as the counter is not overloaded.",
        wakes=lost_h > LOSS_TO_WAKE_H,
    )


def wrong_opening(odd_openings: Sequence[str]) -> str:
    """Return the opening that does not fit in many of the latest stands, "" where there is none."""
    latest = [name for name in odd_openings[-LATEST_STANDS:] if name]
    worst = max(set(latest), key=lambda name: (latest.count(name), name), default="")
    enough = len(odd_openings) >= LATEST_STANDS and latest.count(worst) > WRONG_SHARE * LATEST_STANDS
    return worst if enough else ""


def _openings(danger: Danger) -> Concern | None:
    worst = wrong_opening(danger.odd_openings)
    if not worst:
        return None
    latest = [name for name in danger.odd_openings[-LATEST_STANDS:] if name]
    lost_h, text = cost(danger, 1 - len(latest) / LATEST_STANDS)
    tries = "The mask finds its reference again, and two windows are looked at before the run goes on."
    return Concern(
        "openings",
        f"Opening {worst} does not fit what it counted before, in {latest.count(worst)} of the last "
        f"{LATEST_STANDS} stands: it may be half covered or off its place.",
        "Look at the mask and register its openings again.",
        "Such stands are left out; the data before are good, later ones should be looked at.",
        did=tries if danger.remedy_left else "The stands are left out; the run goes on.",
        cost=text,
        wakes=lost_h > LOSS_TO_WAKE_H and not danger.remedy_left,
        in_doubt=True,
    )


def _closed(danger: Danger) -> Concern | None:
    closed = danger.closed
    if closed is None or len(closed.last_hz) < 2 or closed.before_hz <= 0:
        return None
    least = min(closed.last_hz)
    far = closed.before_se_hz * CLOSED_SIGMA < least - closed.before_hz
    if not far or least <= CLOSED_TIMES * closed.before_hz:
        return None
    return Concern(
        "closed-mask",
        f"With every slit shut the detector counts {least / closed.before_hz:.1f} times what it did before.",
        "A light may be on in the room.",
        f"It is subtracted with its own error; {STAYS_GOOD}, the error bar is a little wider.",
    )


def _restarted(danger: Danger) -> Concern | None:
    if danger.restarts < RESTARTS_AN_HOUR:
        return None
    lost_h, text = cost(danger)
    return Concern(
        "restarts",
        f"The program was restarted {danger.restarts} times within an hour.",
        "Look at the computer: power, memory, updates.",
        f"Every acknowledged visit is stored; {STAYS_GOOD}.",
        did="The run ends after this lap.",
        cost=text,
        wakes=lost_h > LOSS_TO_WAKE_H,
    )


def _refused(danger: Danger) -> Concern | None:
    if not danger.refused:
        return None
    return Concern(
        "storage",
        danger.refused,
        "Make room on the disk, and see that it can be written.",
        f"That visit is not stored, all before are safe; {STAYS_GOOD}.",
        did="The run holds and measures the stand again when the disk takes it.",
        cost=cost(danger)[1],
        wakes=True,
    )


def _ended(danger: Danger) -> Concern:
    lost_h, text = cost(danger)
    return Concern(
        "ended-early",
        f"The run has ended before its time: {danger.ended}",
        "No need to come in, unless you want to go on with it: `tercet run --resume RUN` at the bench.",
        f"Everything counted so far is stored; {STAYS_GOOD}.",
        did="Stages were asked to park.",
        cost=text.replace("If nothing is done the run loses", "Not measured:"),
        wakes=LOSS_TO_WAKE_H < lost_h < inf,
    )
