"""Advice: when the goal is met, and what would meet it when the plan does not."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

from daq.description import Measurement, Rig
from daq.itinerary.compose import Itinerary, compose
from daq.itinerary.decide import MIRRORED
from daq.itinerary.forecast import Forecast, forecast
from daq.itinerary.pilot import HOUR_S

LONGEST_GOAL_H = 240.0  # ten days; a goal beyond it is taken for a slip of the pen
WORTH_SAYING = 0.97  # of the time: a change that saves less is not worth a sentence
TOGETHER = " and "
ORDERS = ("zigzag", "searched", "cyclic", "random", "blocked")


def verdict(expected: Forecast) -> str:
    """Return when the goal is met, as a sentence."""
    outcome = f"kappa will come out at ± {expected.kappa_se:.2e}"
    goal, total_h = expected.goal_se, expected.total_s / HOUR_S
    if goal is None:
        return f"{outcome} after {total_h:.1f} h."
    if expected.goal_s is None:
        shift = (expected.budget["dead time"] ** 2 + expected.budget["trend"] ** 2) ** 0.5
        return f"The goal of ± {goal:.2e} is out of reach: what no time averages is ± {shift:.2e} already."
    hours = expected.goal_s / HOUR_S
    if expected.goal_s <= expected.total_s * (1 + 1e-9):
        return f"The goal of ± {goal:.2e} is met after {hours:.1f} h of {total_h:.1f} h; {outcome}."
    return f"The goal of ± {goal:.2e} is not met in {total_h:.1f} h, where {outcome}: it takes {hours:.1f} h."


def cautions(itinerary: Itinerary) -> tuple[str, ...]:
    """Return what a plan cannot give, however small its error bar."""
    if itinerary.order != "blocked":
        return ()
    return (
        "In this order drift of the source does not cancel: kappa is off by as much as the source drifts, "
        "and the error bar cannot see it.",
    )


def remedies(measurement: Measurement, rig: Rig, itinerary: Itinerary, expected: Forecast) -> tuple[str, ...]:
    """Return what would meet the goal sooner, with figures, the greatest gain first; nothing if it is met."""
    if expected.goal_se is None or (expected.goal_s or 1e99) <= expected.total_s * (1 + 1e-9):
        return ()
    found, best_s = [], expected.goal_s or 1e99
    for words, changed in _alternatives(measurement, itinerary):
        other = forecast(compose(changed, rig), changed)
        if other.goal_s is None or other.goal_s >= WORTH_SAYING * (expected.goal_s or 1e99):
            continue
        if TOGETHER in words and other.goal_s >= WORTH_SAYING * best_s:
            continue  # one change alone does as well
        best_s = min(best_s, other.goal_s)
        found.append((other.goal_s, f"With {words} it takes {other.goal_s / HOUR_S:.1f} h."))
    return (*(text for _, text in sorted(found)), *_brighter(expected), *_monitor(expected))


def hopeless(measurement: Measurement, rig: Rig, itinerary: Itinerary, expected: Forecast) -> str | None:
    """Return why a goal cannot be meant, with what the plan gives and what would help; None if it can.

    Orders for comparison are only told of by `verdict`.
    """
    goal, goal_h = expected.goal_se, expected.goal_s and expected.goal_s / HOUR_S
    if goal is None or itinerary.order not in MIRRORED or (goal_h and goal_h <= LONGEST_GOAL_H):
        return None
    takes = "is out of reach at any length" if goal_h is None else f"needs {goal_h:.0f} h"
    gives = f"{expected.total_s / HOUR_S:.1f} h give ± {expected.kappa_se:.2e}"
    helps = " ".join(remedies(measurement, rig, itinerary, expected))
    return f"± {goal:.2e} {takes}; {gives}. Give a goal that can be met. {helps}"


def orders_compared(measurement: Measurement, rig: Rig, itinerary: Itinerary) -> dict[str, Forecast]:
    """Return the forecast of the same laps in every order, the itinerary's own with its dwell as it is."""
    compared = {}
    for order in ORDERS:
        settings: dict[str, Any] = {"order": order, **_chosen(itinerary)}
        if order not in MIRRORED:
            settings |= {"fly_back": False, "together": 1}
        if order != measurement.itinerary.order:
            settings |= {"opening_order": None, "repeats": 1}
        changed = _with(measurement, itinerary=settings)
        compared[order] = forecast(compose(changed, rig, itinerary.seed), changed)
    return compared


def _chosen(itinerary: Itinerary) -> dict[str, Any]:
    """Return dwell and nesting as the planner chose them, so that they are not chosen again."""
    design = itinerary.design
    return {} if design is None else {"dwell_s": design.dwell_s, "together": design.together}


def _alternatives(measurement: Measurement, itinerary: Itinerary) -> Iterator[tuple[str, Measurement]]:
    """Yield what may be changed in a description, one thing at a time, then together."""
    changes: dict[str, Mapping[str, Any]] = {}
    settings = measurement.itinerary
    measurement = _with(measurement, itinerary=_chosen(itinerary))
    if settings.order != "searched":
        changes['order = "searched"'] = {"itinerary": {"order": "searched", "opening_order": None}}
    if settings.dwell_s is not None:
        changes["dwell_s left to the planner"] = {"itinerary": {"dwell_s": None}}
    if settings.dwell == "equal":
        changes['dwell = "best"'] = {"itinerary": {"dwell": "best"}}
    if measurement.positions.time == "uniform":
        changes['[positions] time = "worth"'] = {"positions": {"time": "worth"}}
    for words, tables in changes.items():
        yield words, _with(measurement, **tables)
    if len(changes) > 1:
        every = {"order": "searched", "opening_order": None, "dwell_s": None, "dwell": "best"}
        yield TOGETHER.join(changes), _with(measurement, itinerary=every, positions={"time": "worth"})


def _with(measurement: Measurement, **tables: Mapping[str, Any]) -> Measurement:
    """Return a measurement with keys of its tables changed."""
    changed = {
        name: getattr(measurement, name).model_copy(update=dict(keys)) for name, keys in tables.items()
    }
    return measurement.model_copy(update=changed)


def _brighter(expected: Forecast) -> Iterator[str]:
    """Yield how bright a source would have to be."""
    goal = expected.goal_se or 0.0
    rest = goal**2 - sum(expected.budget[name] ** 2 for name in ("drift", "lines", "trend", "dead time"))
    if rest > 0:
        factor = expected.budget["counting"] ** 2 / rest
        yield f"In {expected.total_s / HOUR_S:.1f} h a source {factor:.2g} times as bright would do."
    else:
        yield f"A brighter source would not do: without counting noise {_without(expected):.2e} is left."


def _without(expected: Forecast) -> float:
    names = ("drift", "lines", "trend", "dead time")
    return float(sum(expected.budget[name] ** 2 for name in names)) ** 0.5


def _monitor(expected: Forecast) -> Iterator[str]:
    """Yield whether normalising to the monitor would pay."""
    noise, drift = expected.budget.get("monitor"), expected.budget["drift"]
    if noise is not None and noise < drift:
        yield (
            f"Normalised to the monitor, ± {noise:.2e} of its noise would take the place of ± {drift:.2e} of "
            "drift."
        )
