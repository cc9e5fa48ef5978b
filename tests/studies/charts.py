"""Charts and quiet weeks: how often they cry wolf, and how late they speak up.

Stands of 22 s with 6e5 counts. A CUSUM with k = 0.5 and h = 9.06, once against a known level, and once as the
service runs it: self-starting, against the mean of the stands before, anew after each alarm. A change comes
after 100 steady stands.
"""

from __future__ import annotations

from collections import deque
from collections.abc import Callable, Mapping
from math import sqrt
from typing import Any

import numpy as np

from daq.estimate import cusum, cusum_run_length
from daq.estimate.arrays import FloatArray
from daq.estimate.shift import AFTER, H, K, ShiftChart
from daq.estimate.wake import LATEST_STANDS, Closed, Danger, dangers
from tests.studies.bench import generator_of
from tests.studies.rows import Each, rows

ALARMS = 1000
STAND_S = 22.0
COUNTS = 6e5
SIGMA = 1 / sqrt(COUNTS)
WEEK_STANDS = 7 * 86_400 / STAND_S
NIGHT_STANDS = round(36_000 / STAND_S)
LAPS = 38
FLAGS_A_NIGHT = 0.12  # stands that quality rules flag on a quiet night (the study of quality)
SHUT_COUNTS = 800.0 * 2.2 * 41  # behind shut slits in a lap


def study(alarms: int = ALARMS, each: Each = rows) -> dict[str, Any]:
    """Return intervals between false alarms, delays after a change, and wakes in quiet weeks."""
    about = (
        f"Stands of {STAND_S:g} s with {COUNTS:.0e} counts, k = {K:g}, h = {H:g}; quiet weeks: seven nights "
        "of 10 h, a walk of 1 % per root hour, counts, quality flags and shut slits at random"
    )
    return {"about": about, "rows": each("charts:row", {name: [name, alarms] for name in ROWS})}


def row(name: str, alarms: int) -> dict[str, Any]:
    """Return the figures of one row."""
    return ROWS[name](alarms)


def _steady(alarms: int) -> dict[str, Any]:
    random = generator_of("charts", "steady")
    lengths = np.array([_first_alarm(random) for _ in range(alarms)])
    weeks = lengths.mean() / WEEK_STANDS
    return {
        "alarms": alarms,
        "weeks": float(weeks),
        "weeks_se": float(lengths.std(ddof=1)) / sqrt(alarms) / WEEK_STANDS,
        "theory": cusum_run_length(K, H, 0.0) / WEEK_STANDS,
        "meets": {"interval": bool(0.9 <= weeks <= 1.1)},
    }


def _first_alarm(random: np.random.Generator, chunk: int = 150_000) -> int:
    """Return how many values a chart of standard normal values takes until its first alarm."""
    values = random.normal(size=chunk)
    while not len(found := cusum(values, 0.0, K, H).alarms):
        values = np.concatenate([values, random.normal(size=chunk)])
    return int(found[0]) + 1


def _steady_running(alarms: int) -> dict[str, Any]:
    random, chart = generator_of("charts", "running"), ShiftChart()
    stands = told = 0
    while told < alarms:
        for level in 1 + SIGMA * random.normal(size=10_000):
            stands += 1
            told += chart.add(float(level), SIGMA**2, stands * STAND_S / 3600)
    weeks = stands / told / WEEK_STANDS
    return {
        "alarms": told,
        "weeks": weeks,
        "weeks_se": weeks / sqrt(told),
        "theory": cusum_run_length(K, H, 0.0) / WEEK_STANDS,
        "meets": {"interval": 0.9 <= weeks <= 1.1},
    }


def _delay(sort: str, changes: int) -> dict[str, Any]:
    """Return how long after a change the chart alarms, and how often it is told right as it runs."""
    random = generator_of("charts", sort)
    at, more = 100, 200
    after = np.maximum(np.arange(at + more) - at + 1, 0)
    change = 0.005 * (after > 0) if sort == "step" else 0.01 * after * STAND_S / 3600
    known, told_s, right = list[float](), list[float](), 0
    while len(told_s) < changes:
        values = random.normal(size=at + more)
        scores = values + change / SIGMA
        first = cusum(scores, 0.0, K, H).alarms
        if not len(first) or first[0] < at:
            continue  # a false alarm before the change
        told = _told(1 + SIGMA * scores)
        if told is None or told[0] < at:
            continue
        known.append(STAND_S * (first[0] - at + 1))
        told_s.append(STAND_S * (told[0] - at + 1))
        right += told[1] == (sort == "step")
    limit_s = 120.0 if sort == "step" else 720.0
    running = np.array(told_s) - AFTER * STAND_S
    return {
        "alarms": changes,
        "delay_s": float(np.mean(known)),
        "delay_se_s": float(np.std(known, ddof=1)) / sqrt(changes),
        "running_s": float(running.mean()),
        "running_se_s": float(running.std(ddof=1)) / sqrt(changes),
        "told_s": float(np.mean(told_s)),
        "right": right / changes,
        "meets": {"delay": float(np.mean(known)) <= limit_s, "as it runs": bool(running.mean() <= limit_s)},
    }


def _told(levels: FloatArray) -> tuple[int, bool] | None:
    """Return at which stand the first change was told, and whether as a sudden one."""
    chart = ShiftChart()
    for number, level in enumerate(levels.tolist()):
        if chart.add(level, SIGMA**2, number * STAND_S / 3600) and chart.last is not None:
            return number, chart.last.sudden
    return None


def _weeks(weeks: int) -> dict[str, Any]:
    """Return how often W2, W3, W8 and W9 wake somebody in quiet weeks, and how often they make a note."""
    random = generator_of("charts", "weeks")
    wakes = notes = 0
    for _ in range(7 * weeks):
        found = _night(random)
        wakes += found["wake"]
        notes += found["note"]
    return {"alarms": weeks, "wakes": wakes, "notes": notes, "meets": {"wakes": 5 * wakes <= weeks}}


def _night(random: np.random.Generator) -> dict[str, int]:
    """Return how many concerns of a quiet night wake, and how many do not; each counts once."""
    walk = 0.01 * sqrt(STAND_S / 3600) * np.cumsum(random.normal(size=NIGHT_STANDS))
    levels = np.exp(walk) + SIGMA * random.normal(size=NIGHT_STANDS)
    flagged = np.flatnonzero(random.random(NIGHT_STANDS) < FLAGS_A_NIGHT / NIGHT_STANDS)
    names = {int(stand): str(random.choice(["A", "AB", "ABC", "C"])) for stand in flagged}
    shut_hz = random.poisson(SHUT_COUNTS, LAPS) / SHUT_COUNTS * 800.0
    odd: deque[str] = deque(maxlen=LATEST_STANDS)
    seen: set[tuple[str, bool]] = set()
    for stand in range(NIGHT_STANDS):
        odd.append(names.get(stand, ""))
        lap = stand * LAPS // NIGHT_STANDS
        danger = Danger(
            left_h=10.0 * (1 - stand / NIGHT_STANDS),
            planned_h=10.0,
            planned_se=1e-4,
            levels=levels[max(stand - 2, 0) : stand + 1].tolist(),
            dark_stands=int((levels[max(stand - 1, 0) : stand + 1] < 0.05).sum()),
            odd_openings=tuple(odd) if flagged.size else (),
            closed=_shut(shut_hz, lap) if stand % 41 == 0 else None,
        )
        seen |= {(one.kind, one.wakes) for one in dangers(danger)}
    return {"wake": sum(wakes for _, wakes in seen), "note": sum(not wakes for _, wakes in seen)}


def _shut(shut_hz: FloatArray, lap: int) -> Closed | None:
    if lap < 4:
        return None
    before = shut_hz[: lap - 2]
    se = float(before.mean()) / sqrt(SHUT_COUNTS * len(before))
    return Closed(shut_hz[lap - 2 : lap].tolist(), float(before.mean()), se)


ROWS: Mapping[str, Callable[[int], dict[str, Any]]] = {
    "false alarms, level known": _steady,
    "false alarms, as it runs": _steady_running,
    "step of 0.5 %": lambda alarms: _delay("step", alarms),
    "ramp of 1 % an hour": lambda alarms: _delay("ramp", alarms),
    "quiet weeks": _weeks,
}
