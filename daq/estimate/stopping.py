"""Stopping: when a run may end before its plan does, and which band speaks after each kind of end."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import sqrt
from typing import Any

from scipy.special import ndtr

ONCE, WHOLE_NIGHT = "once", "whole night"
GOAL_FROM_PAIR, FUTILE_FROM_PAIR = 12, 8
FUTILE_BELOW, Z_CRITICAL = 0.10, 1.959963984540054

PLANNED, GOAL, END_TIME = "planned", "goal", "end time"
FUTILITY, BY_HAND, BROKEN = "futility", "by hand", "broken off"


@dataclass(frozen=True, slots=True)
class Stopping:
    """What a measurement allows besides its planned end: a goal of the error bar, futility.

    `excess`: jackknife over counting as it was planned.
    """

    goal_se: float | None = None
    futility: bool = False
    excess: float = 1.0


@dataclass(frozen=True, slots=True, kw_only=True)
class Stop:
    """How a run ended: its kind, the reason in words, who, after how many complete pairs, and who could see.

    `kappa_visible`: nothing hid kappa from whoever was about. `band`: "once" where the t bar holds, "whole
    night" where only the band does that holds at every look.
    """

    kind: str
    reason: str
    who: str
    pairs: int
    kappa_visible: bool
    band: str
    remark: str = ""


def stop(kind: str, reason: str, who: str, pairs: int, kappa_visible: bool) -> Stop:
    """Return the record of an end, with the band that it leaves to be read.

    Notes
    -----
    The planned end, a time fixed beforehand and the goal of the counting error do not look at kappa, nor can
    a person while it is hidden: the t bar keeps its 95 % (studies). Futility looks at kappa, and a
    person who sees it may have.
    """
    blind = kind in (PLANNED, GOAL, END_TIME) or not kappa_visible
    return Stop(
        kind=kind,
        reason=reason,
        who=who,
        pairs=pairs,
        kappa_visible=kappa_visible,
        band=ONCE if blind else WHOLE_NIGHT,
        remark=_REMARKS.get(kind, "") if not blind else "",
    )


_REMARKS = {
    FUTILITY: "stopped for futility: kappa is drawn towards zero by a fraction of its error bar",
    BY_HAND: "unplanned: it was ended by hand while kappa could be seen",
    BROKEN: "unplanned: it was broken off while kappa could be seen",
}


def due(stopping: Stopping, numbers: Mapping[str, Any], through: int | None = None) -> str:
    """Return which kind of end is due after a complete pair, or nothing.

    Parameters
    ----------
    numbers
        Of `Running.after`: kappa, kappa_se, kappa_counting_se, pairs; and planned_pairs.

    through
        Pairs that will be complete at the end, where that is one more than the numbers rest on.

    Notes
    -----
    The goal is compared with the counting error times the planned excess, never with the jackknife of the
    moment, nor with an excess that this run has shown: their noise would choose the end (studies).
    """
    pairs = through or numbers["pairs"]
    counting, se = numbers["kappa_counting_se"], numbers["kappa_se"]
    if stopping.goal_se and counting and pairs >= GOAL_FROM_PAIR:
        to_come = counting * sqrt(numbers["pairs"] / pairs)
        if to_come * stopping.excess <= stopping.goal_se:
            return GOAL
    if stopping.futility and pairs >= FUTILE_FROM_PAIR and se:
        share = numbers["pairs"] / numbers["planned_pairs"]
        if conditional_power(numbers["kappa"] / se, share) < FUTILE_BELOW:
            return FUTILITY
    return ""


def conditional_power(z: float, share: float) -> float:
    """Return how probable it is that kappa lies off zero at the planned end, if it goes on as so far.

    Parameters
    ----------
    z
        Kappa in standard errors.
    share
        Of the planned pairs that are complete, above 0.

    References
    ----------
    .. [1] "Group Sequential Methods with Applications to Clinical Trials", ch. 10 (conditional power under
       the current trend), from memory.
    """
    if share >= 1:
        return float(abs(z) > Z_CRITICAL)
    trend, rest = z / sqrt(share), sqrt(1 - share)
    return float(ndtr(-(Z_CRITICAL - trend) / rest) + ndtr((-Z_CRITICAL - trend) / rest))
