"""Dry lap: every move of a lap, the shortest gates: limits, cables, times and encoders before the night."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from itertools import pairwise
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.itinerary import compose
from daq.records import Quality
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, once
from daq.tasks.panels import Curve, Panel

GATE_S, LATE, LATE_S = 0.1, 0.05, 0.2
ASTRAY = Quality.OFF_TARGET | Quality.MOVED


def _visits(setting: Setting) -> Sequence[Ask]:
    plan = compose(setting.measurement, setting.rig)
    gate_s = max(GATE_S, setting.rig.shortest_gate_s)
    return [
        Ask(
            "move",
            gate_s,
            float(plan.position_mm[at]),
            int(plan.opening[at]),
            beam=setting.shut_beam,
        )
        for at in np.flatnonzero(plan.lap == 0)
    ]


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    planned_s, took_s = _moves_s(setting, taken)
    late = took_s - planned_s
    allowed = LATE * planned_s + LATE_S + setting.rig.readout_s
    off = _off_mm(setting, taken)
    values = {
        "moves": len(taken),
        "late_s": float(np.median(late)),
        "latest_s": float(late.max()),
        "slow": int(np.count_nonzero(late > allowed)),
        "astray": sum(bool(reading.quality & ASTRAY) for _, reading in taken),
        "off_mm": {axis: float(np.max(np.abs(off_mm))) for axis, off_mm in off.items()},
    }
    return Outcome(
        values=values,
        se={},
        verdict="fail" if values["slow"] or values["astray"] else "pass",
        sentence=_sentence(values),
        model="planned against measured times",
        panels=_panels(planned_s, took_s, off),
    )


def _sentence(values: Mapping[str, Any]) -> str:
    by_axis = ", ".join(f"{axis} {1e3 * most_mm:.1f} um" for axis, most_mm in values["off_mm"].items())
    return (
        f"{values['moves']} stops: {values['astray']} off their target (most: {by_axis}), {values['slow']} "
        f"moves later than {100 * LATE:g} % and {LATE_S:g} s beyond the plan and the readout, the latest "
        f"{values['latest_s']:.2f} s."
    )


def _panels(planned_s: FloatArray, took_s: FloatArray, off: Mapping[str, FloatArray]) -> tuple[Panel, ...]:
    moves = (
        Curve(planned_s, took_s, "move, readout included"),
        Curve(np.sort(planned_s), np.sort(planned_s), "as planned", line=True),
    )
    encoders = (Curve(np.arange(len(v), dtype=float), 1e3 * v, axis) for axis, v in off.items())
    return (
        Panel("Moves", "planned [s]", "measured [s]", moves),
        Panel("Encoder off target", "stop", "[um]", tuple(encoders)),
    )


def _moves_s(setting: Setting, taken: Sequence[Taken]) -> tuple[FloatArray, FloatArray]:
    """Return how long every move was to take, and took from the end of a gate to the next one [s]."""
    rig, matrix = setting.rig, setting.rig.mask_move_s()
    planned, took = [], []
    for (before, first), (after, second) in pairwise(taken):
        way_mm = abs(after.position_mm - before.position_mm)
        planned.append(max(matrix[before.opening, after.opening], rig.detector_move_s(way_mm)))
        took.append((second.gate_open_ns - first.gate_close_ns) / 1e9)
    return np.array(planned), np.array(took)


def _off_mm(setting: Setting, taken: Sequence[Taken]) -> dict[str, FloatArray]:
    mask, detector = setting.rig.mask.axis, setting.rig.detector.axis
    return {
        mask: np.array([r.encoder_mm[mask][0] - setting.rig.mask_at_mm(ask.opening) for ask, r in taken]),
        detector: np.array([r.encoder_mm[detector][0] - ask.position_mm for ask, r in taken]),
    }


TASK = Task(
    name="dry-lap",
    purpose="Every move of a lap with the shortest gates: limits, cables, times and encoders.",
    days=1,
    holds_for=("axes",),
    lacks=lambda setting: (),
    asks=once(_visits),
    fit=_fit,
)
