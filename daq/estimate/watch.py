"""Watching a night: conditions that a person should know of, as sentences made from the run's own figures."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

LEVEL_CHANGE = 0.05  # relative change of the source that is worth a sentence
EXCESS_LIMIT = 1.47  # 0.3 % of good nights of 19 pairs exceed it
LEFT_OUT_SHARE = 0.05
PAIRS_TO_JUDGE = 8


@dataclass(frozen=True, slots=True)
class Concern:
    """A warning: what happened, what to do, and whether the residual is still good."""

    kind: str
    what: str
    do: str
    good: str


@dataclass(frozen=True, slots=True)
class Watched:
    """The figures that the conditions look at."""

    levels: Sequence[float]  # source level of each stand over the expected one
    hours: float
    pairs: int
    excess: float | None
    stands_done: int
    stands_left_out: int
    stands_repeated: int
    short_of_room: str = ""  # a sentence with figures


def concerns(watched: Watched) -> tuple[Concern, ...]:
    """Return the warnings of a run as it stands."""
    found = (_room(watched), _level(watched), _excess(watched), _left_out(watched), _repeated(watched))
    return tuple(concern for concern in found if concern is not None)


def _room(watched: Watched) -> Concern | None:
    if not watched.short_of_room:
        return None
    return Concern(
        "room",
        watched.short_of_room,
        "Make room on the disk; a run that holds for it goes on by itself.",
        "Everything that was acknowledged is stored, so kappa is still good.",
    )


def _level(watched: Watched) -> Concern | None:
    if len(watched.levels) < 20:
        return None
    first = sum(watched.levels[:10]) / 10
    last = sum(watched.levels[-10:]) / 10
    change = last / first - 1 if first else 0.0
    if abs(change) < LEVEL_CHANGE:
        return None
    word = "fell" if change < 0 else "rose"
    return Concern(
        "level",
        f"The count rate {word} by {100 * abs(change):.1f} % in {watched.hours:.1f} hours.",
        "Nothing has to be done tonight; look at the source in the morning.",
        "The order of measurement cancels a slow change, so kappa is still good.",
    )


def _excess(watched: Watched) -> Concern | None:
    if watched.excess is None or watched.pairs < PAIRS_TO_JUDGE or watched.excess < EXCESS_LIMIT:
        return None
    return Concern(
        "excess",
        f"The pairs scatter {watched.excess:.2f} times as much as counting alone explains.",
        "Look for something that comes and goes within minutes: the source, a light, a loose cable.",
        "The error bar is made from this scatter, so it stays honest, only wider.",
    )


def _left_out(watched: Watched) -> Concern | None:
    share = watched.stands_left_out / watched.stands_done if watched.stands_done else 0.0
    if share <= LEFT_OUT_SHARE:
        return None
    return Concern(
        "left-out",
        f"{watched.stands_left_out} of {watched.stands_done} stands are left out by the quality rules.",
        "Look at the list of reasons in the report before you use this night.",
        "What is left is balanced, so kappa is good, but a person should decide whether the night counts.",
    )


def _repeated(watched: Watched) -> Concern | None:
    if not watched.stands_repeated:
        return None
    who = "One stand was" if watched.stands_repeated == 1 else f"{watched.stands_repeated} stands were"
    return Concern(
        "repeated",
        f"{who} repeated after an interruption.",
        "The log says which device or break it was.",
        "Repeated stands replace the interrupted ones, so kappa is still good.",
    )
