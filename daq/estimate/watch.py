"""Watching a night: conditions for the morning, as sentences made from the run's own figures."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from daq.estimate.shift import Shift

PAIRS_TO_JUDGE = 8
MANY_STANDS = 5  # flagged by one rule: from here it is a pattern, not an accident
GOES_ON = "The run goes on."
NO_COST = "Doing nothing costs nothing."
STAYS_GOOD = "kappa is still good"


@dataclass(frozen=True, slots=True)
class Thresholds:
    """Above what a condition is worth a sentence; keys as in the table [warn] of the description."""

    level_change: float = 0.05  # relative change of the source
    step_change: float = 0.005  # relative size of a sudden change
    excess: float = 1.47  # 0.3 % of good nights of 19 pairs exceed it
    left_out_share: float = 0.05
    load: float = 0.05  # rate times dead time
    goal_margin: float = 1.1  # bar to come over the goal


@dataclass(frozen=True, slots=True)
class Concern:
    """A warning: what happened, what to do, is kappa still good, what was done, the cost of doing nothing.

    `wakes`: a person should be woken for it. `in_doubt`: kappa is not known to be good until somebody looked.
    """

    kind: str
    what: str
    do: str
    good: str
    did: str = GOES_ON
    cost: str = NO_COST
    wakes: bool = False
    in_doubt: bool = False


@dataclass(frozen=True, slots=True)
class Watched:
    """The figures that the conditions look at; `over` says that the run has ended."""

    levels: Sequence[float]  # source level of each stand over the expected one
    hours: float  # of measuring, without breaks
    pairs: int
    excess: float | None
    stands_done: int
    stands_left_out: int
    stands_repeated: int
    short_of_room: str = ""  # a sentence with figures
    over: bool = False
    shift: Shift | None = None
    flagged: Mapping[str, int] = field(default_factory=dict)  # stands by the name of a quality bit
    load: float = 0.0  # largest rate times dead time
    goal_se: float | None = None
    forecast_se: float | None = None
    order: str = "zigzag"
    silent_sensors: Sequence[str] = ()
    thresholds: Thresholds = Thresholds()


def concerns(watched: Watched) -> tuple[Concern, ...]:
    """Return the notes on a run as it stands; nobody is woken for them."""
    found = [judge(watched) for judge in (_order, _room, _level, _step, _excess, _left_out, _repeated)]
    found += [judge(watched) for judge in (_load, _goal, _sensors)]
    found += [_many(watched, name, *words) for name, words in _MANY.items()]
    return tuple(concern for concern in found if concern is not None)


def _order(watched: Watched) -> Concern | None:
    if watched.order != "blocked":
        return None
    return Concern(
        "order",
        "The openings are measured one after another, so that drift of the source does not cancel.",
        "Use the zig-zag order for a result; this one is for comparison.",
        "kappa is off by as much as the source drifts, and the error bar cannot see it.",
        in_doubt=True,
    )


def _room(watched: Watched) -> Concern | None:
    if not watched.short_of_room or watched.over:
        return None
    return Concern(
        "room",
        watched.short_of_room,
        "Make room on the disk.",
        f"Everything that was acknowledged is stored, so {STAYS_GOOD}.",
        did="Nothing yet; the run holds when there is too little, until there is enough.",
        cost="The run may hold until somebody makes room.",
    )


def _level(watched: Watched) -> Concern | None:
    if len(watched.levels) < 20:
        return None
    first = sum(watched.levels[:10]) / 10
    last = sum(watched.levels[-10:]) / 10
    change = last / first - 1 if first else 0.0
    if abs(change) < watched.thresholds.level_change:
        return None
    return Concern(
        "level",
        f"The count rate {_moved(change)} by {100 * abs(change):.1f} % "
        f"in {watched.hours:.1f} hours of measuring.{_slowly(watched.shift)}",
        _source_later(watched),
        f"The order of measurement cancels a slow change, so {STAYS_GOOD}.",
        cost="A wider error bar where the rate fell; nothing else.",
    )


def _slowly(shift: Shift | None) -> str:
    """Return since when the level has been changing slowly, nothing where it has not."""
    if shift is None or shift.sudden:
        return ""
    return f" Its latest slow change began {shift.hours:.1f} hours of measuring after the start."


def _step(watched: Watched) -> Concern | None:
    shift = watched.shift
    if shift is None or not shift.sudden or abs(shift.size) < watched.thresholds.step_change:
        return None
    return Concern(
        "step",
        f"The count rate {_moved(shift.size)} by {100 * abs(shift.size):.1f} % at once, "
        f"{shift.hours:.1f} hours of measuring after the start.",
        _source_later(watched),
        f"One stand saw both levels, and the quality rules look at it; {STAYS_GOOD}.",
    )


def _moved(change: float) -> str:
    return "fell" if change < 0 else "rose"


def _source_later(watched: Watched) -> str:
    return (
        "Look at the source before the next run."
        if watched.over
        else "Nothing to do now; look at the source later."
    )


def _excess(watched: Watched) -> Concern | None:
    if watched.excess is None or watched.pairs < PAIRS_TO_JUDGE or watched.excess < watched.thresholds.excess:
        return None
    return Concern(
        "excess",
        f"The pairs scatter {watched.excess:.2f} times as much as counting alone explains.",
        "Look for something that comes and goes within minutes: the source, a light, a loose cable.",
        "The error bar is made from this scatter, so it stays honest, only wider.",
        cost="An error bar wider than counting alone would give.",
    )


def _left_out(watched: Watched) -> Concern | None:
    share = watched.stands_left_out / watched.stands_done if watched.stands_done else 0.0
    if share <= watched.thresholds.left_out_share:
        return None
    return Concern(
        "left-out",
        f"{watched.stands_left_out} of {watched.stands_done} stands are left out by the quality rules.",
        "Look at the list of reasons in the report before you use this run.",
        "What is left is balanced, but a person should decide whether the run counts.",
        did="These stands are not used.",
        cost=f"{100 * share:.0f} % of the measuring time.",
        in_doubt=True,
    )


def _repeated(watched: Watched) -> Concern | None:
    if not watched.stands_repeated:
        return None
    who = "One stand was" if watched.stands_repeated == 1 else f"{watched.stands_repeated} stands were"
    return Concern(
        "repeated",
        f"{who} repeated after an interruption.",
        "The log says which device, rule or break it was.",
        f"Repeated stands replace the interrupted ones, so {STAYS_GOOD}.",
        did="The stand was measured again, whole.",
    )


def _load(watched: Watched) -> Concern | None:
    if watched.load <= watched.thresholds.load:
        return None
    return Concern(
        "load",
        f"The brightest visits keep the counter busy for {100 * watched.load:.1f} % of the time.",
        "Attenuate the light before the next run, or measure the dead time more closely.",
        "The correction for dead time is large; kappa is as good as the dead time is known.",
        cost="A residual that rests on the dead time.",
        in_doubt=True,
    )


def _goal(watched: Watched) -> Concern | None:
    goal, forecast = watched.goal_se, watched.forecast_se
    if (
        goal is None
        or forecast is None
        or watched.pairs < PAIRS_TO_JUDGE
        or forecast <= watched.thresholds.goal_margin * goal
    ):
        return None
    time = (forecast / goal) ** 2
    return Concern(
        "goal",
        f"The error bar will be ± {forecast:.2g} at the planned end, and the goal is ± {goal:.2g}.",
        f"Plan {time:.1f} times as long, or more light; `tercet compose` says what helps.",
        f"Only the size of the error bar is concerned; {STAYS_GOOD}.",
    )


def _sensors(watched: Watched) -> Concern | None:
    if not watched.silent_sensors or watched.over:
        return None
    names = ", ".join(name.replace("_", " ") for name in watched.silent_sensors)
    return Concern(
        "sensors",
        f"No news from: {names}.",
        "Look at the sensor and its cable.",
        f"Counts do not depend on it; {STAYS_GOOD}.",
        did="The sensor is asked again at every visit; the run goes on without it.",
    )


# By quality bit: what so many stands showed, what to do.
_MANY: Mapping[str, tuple[str, str]] = {
    "MONITOR": ("show a ratio of counts to monitor out of its band", "Look at the monitor and its path."),
    "DISPERSION": ("saw counts scatter within a visit", "Look for a light or a cable that comes and goes."),
    "OFF_TARGET": ("found an axis away from its target", "Look at the stages and their loads."),
    "CLOCK_STEP": ("saw the computer's clock jump", "Look at the time service of the computer."),
}


def _many(watched: Watched, name: str, showed: str, do: str) -> Concern | None:
    many, least = watched.flagged.get(name, 0), 1 if name == "CLOCK_STEP" else MANY_STANDS
    if many < least:
        return None
    stands = "One stand" if many == 1 else f"{many} stands"
    return Concern(
        name.lower().replace("_", "-"),
        f"{stands} {showed}.",
        do,
        f"Run time does not follow that clock, so {STAYS_GOOD}."
        if name == "CLOCK_STEP"
        else f"Such stands are left out or flagged by rule, so {STAYS_GOOD}.",
    )
