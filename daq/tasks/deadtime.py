"""Deadtime: how long the counter is blind after a count, from two slits alone and together, and from gaps.

A counter in list mode says when it counted: the gaps between counts give the dead time too, most often
better. What grows with the rate and is no dead time, such as pulses that sag, is in the sums and not in the
gaps: both have to agree.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.tasks.agreement import Found, budget_s, kappa_shift, sentence_of, verdict_of
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, once
from daq.tasks.crossings import AB, NAME, NONE, A, B, crossings_mm, dead_time_of_cycles
from daq.tasks.gaps import Gaps, Ticks, dead_time_of_gaps
from daq.tasks.panels import Curve, Panel, level

DWELL_S, CYCLES = 5.0, 16
ORDER = (NONE, A, AB, B, B, AB, A, NONE)  # and back: a straight drift cancels
GAPS, GATES = "gaps", 8
WANTED_GAPS, SHORTEST_S, LONGEST_S = 1_000_000, 0.1, 10.0


def _visits(setting: Setting) -> Sequence[Ask]:
    places = crossings_mm(setting.rig)
    sums = [
        Ask(f"{at} {cycle}", DWELL_S, place, opening)
        for cycle in range(CYCLES)
        for at, place in enumerate(places)
        for opening in ORDER
    ]
    return [*_gates(setting), *sums]


def _gates(setting: Setting) -> list[Ask]:
    """Return visits at the brightest place whose counts are timed; none where the counter times nothing."""
    if setting.rig.list_mode is None:
        return []
    best = setting.yardstick
    wanted_s = round(WANTED_GAPS / (GATES * max(best.brightest_hz, 1.0)), 1)
    dwell_s = min(max(wanted_s, SHORTEST_S), LONGEST_S)
    return [Ask(GAPS, dwell_s, best.position_mm, best.opening, events=True)] * GATES


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    kind = setting.measurement.estimate.dead_time_kind
    summed = [one for one in taken if one[0].role != GAPS]
    took_s = (summed[-1][1].gate_close_ns - summed[0][1].gate_open_ns) / 1e9
    found = Found(dead_time_of_cycles(_rates(summed), kind), _gaps(setting, taken), took_s)
    values, se = _values(setting, found)
    timed, timed_se = _by_gaps(found)
    return Outcome(
        values=values | timed,
        se=se | timed_se,
        verdict=verdict_of(setting, found),
        sentence=sentence_of(setting, found),
        model=f"two slits alone and together, {kind}" + ("; gaps" if found.gaps else ""),
        panels=_panels(found),
        chi2=found.gaps.chi2 if found.gaps else None,
        dof=found.gaps.dof if found.gaps else None,
    )


def _values(setting: Setting, found: Found) -> tuple[dict[str, Any], dict[str, Any]]:
    (tau, se), top_hz = found.best, setting.yardstick.brightest_hz
    told = setting.measurement.estimate.dead_time_s
    values = {
        "dead_time_s": tau,
        "largest_loss": top_hz * tau,
        "kappa_shift": kappa_shift(setting, found),
        "described_s": told,
        "away_in_se": (tau - told) / se,
        "by_sums_s": found.sums.tau_s,
        "fine_after_s": budget_s(found),
    }
    return values, {"dead_time_s": se, "largest_loss": top_hz * se, "by_sums_s": found.sums.se_s}


def _by_gaps(found: Found) -> tuple[dict[str, Any], dict[str, Any]]:
    """Return what gaps say; nothing where the counter does not tell them."""
    if found.gaps is None:
        return {}, {}
    one = found.gaps
    values = {"by_gaps_s": one.tau_s, "apart_in_se": found.apart, "gaps": one.number, "soon": one.soon}
    return values, {"by_gaps_s": one.se_s, "soon": one.soon_se}


def _gaps(setting: Setting, taken: Sequence[Taken]) -> Gaps | None:
    layout = setting.rig.list_mode
    gates = [reading.events for ask, reading in taken if ask.role == GAPS and reading.events is not None]
    if layout is None or not gates:
        return None
    channels = int(layout["channels"])
    return dead_time_of_gaps([_ticks(one, channels) for one in gates], layout["tick_s"] * channels)


def _ticks(events: bytes, channels: int) -> Ticks:
    """Return when the first channel counted, in ticks of the counter."""
    times = np.frombuffer(events, "<u8").astype(np.int64)
    return times[times % channels == 0] // channels


def _rates(taken: Sequence[Taken]) -> FloatArray:
    """Return rates by cycle, crossing and opening (C, 4, 4) [1/s]."""
    value, live = np.zeros((2, CYCLES, 4, 4))
    for ask, reading in taken:
        at, cycle = map(int, ask.role.split())
        value[cycle, at, ask.opening] += reading.values[0]
        live[cycle, at, ask.opening] += reading.live_s
    return np.asarray(value / live)


def _panels(found: Found) -> tuple[Panel, ...]:
    each = 1e9 * found.sums.by_cycle_s
    at = np.arange(1.0, len(each) + 1)
    curves = [
        Curve(at, each, "one cycle"),
        level(at, 1e9 * found.sums.tau_s, "all together"),
    ]
    if found.gaps is None:
        return (Panel("Dead time by sums, all crossings together", "cycle", "dead time [ns]", tuple(curves)),)
    curves.append(level(at, 1e9 * found.gaps.tau_s, "gaps"))
    middles = 1e9 * np.sqrt(found.gaps.edges_s[1:] * found.gaps.edges_s[:-1])
    return (
        Panel("Dead time by sums, all crossings together", "cycle", "dead time [ns]", tuple(curves)),
        Panel(
            "Gaps between counts, over those of an even rate behind the dead time",
            "gap [ns]",
            "seen over expected",
            (
                Curve(middles, found.gaps.ratio, "gaps", found.gaps.ratio_se),
                Curve(middles, np.ones(len(middles)), "even rate", line=True),
            ),
            log_x=True,
        ),
    )


TASK = Task(
    name=NAME,
    purpose="How long the counter is blind after a count, from two slits alone and together, and from gaps.",
    days=90,
    holds_for=("devices",),
    asks=once(_visits),
    fit=_fit,
)
