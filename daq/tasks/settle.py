"""Settle: what the light does right after a move of the mask, and whether the described wait is enough.

Gates follow one another from the moment at which nothing moves any more; no slices are needed.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.tasks.contract import Ask, Curve, Outcome, Panel, Setting, Taken, Task, counts_only

GATE_S, GATES, MOVES = 0.2, 8, 40
TIMES_S = np.geomspace(0.03, 1.0, 36)
ALLOWED = 4.0  # of chi2 above its least: two standard errors
SEEN = 3.0  # standard errors


@dataclass(frozen=True, slots=True)
class Transient:
    """A fading share of the light: size `a` and its error for every time constant, and chi2 of each."""

    size: FloatArray
    se: FloatArray
    chi2: FloatArray

    @property
    def best(self) -> int:
        """The place of the time constant that fits best."""
        return int(np.argmin(self.chi2))

    def bias(self, wait_s: float, dwell_s: float, errors: float) -> FloatArray:
        """Return what a visit that waits is off by, size and so many errors, for every time constant."""
        size = np.abs(self.size) + errors * self.se
        return np.asarray(
            size * TIMES_S / dwell_s * np.exp(-wait_s / TIMES_S) * -np.expm1(-dwell_s / TIMES_S)
        )


def transient(counts: FloatArray, since_s: FloatArray, gate_s: float) -> Transient:
    """Return what fades in counts of gates that opened at times since the move (gates summed over moves).

    Notes
    -----
    n = r (1 + a exp(-t/T)), r and r a by weighted least squares for each T of a grid.
    """
    sizes, errors, misfits = [], [], []
    for time_s in TIMES_S:
        fading = np.exp(-since_s / time_s) * -np.expm1(-gate_s / time_s) * time_s / gate_s
        design = np.stack([np.ones(len(counts)), fading], axis=1) / np.sqrt(counts)[:, None]
        inverse = np.linalg.inv(design.T @ design)
        level, part = inverse @ design.T @ np.sqrt(counts)
        sizes.append(part / level)
        errors.append(float(np.sqrt(inverse[1, 1])) / level)
        misfits.append(float(np.sum((np.sqrt(counts) - design @ np.array([level, part])) ** 2)))
    return Transient(np.array(sizes), np.array(errors), np.array(misfits))


def _asks(setting: Setting, taken: Sequence[Taken]) -> Sequence[Ask]:
    if taken:
        return ()
    yard, rig = setting.yardstick, setting.rig
    here = rig.mask_at_mm(yard.opening)
    far = max((rig.mask_at_mm(mask) for mask in rig.opening_masks), key=lambda at: abs(at - here))
    beam: Literal["", "open"] = "open" if setting.shutter else ""
    first = Ask("0", GATE_S, yard.position_mm, yard.opening, via_mm=far, early=True, beam=beam)
    later = [
        Ask(str(n), GATE_S, yard.position_mm, yard.opening, early=True, beam=beam) for n in range(1, GATES)
    ]
    return [first, *later] * MOVES


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    counts = np.array([reading.values[0] for _, reading in taken], float).reshape(MOVES, GATES)
    opened = np.array([reading.gate_open_ns for _, reading in taken], float).reshape(MOVES, GATES) / 1e9
    since_s = (opened - opened[:, :1]).mean(axis=0)
    level = counts[:, GATES // 2 :].mean(axis=1, keepdims=True)  # the source drifts from move to move
    summed = np.asarray((counts / level).sum(axis=0) * level.mean())
    found = transient(summed, since_s, GATE_S)
    at, wait_s = found.best, setting.rig.axes[setting.rig.mask.axis].settle_s
    dwell_s = setting.measurement.itinerary.dwell_s or 1.0
    worst_off = float(found.bias(wait_s, dwell_s, 2.0)[found.chi2 <= found.chi2[at] + ALLOWED].max())
    limit, size, se = setting.yardstick.rate_error, float(found.size[at]), float(found.se[at])
    seen = abs(size) > SEEN * se
    likely_off = float(found.bias(wait_s, dwell_s, 0.0)[at]) if seen else 0.0
    said = (
        f"{100 * size:+.2f} +- {100 * se:.2f} % fades in {TIMES_S[at]:.2f} s"
        if seen
        else "nothing is seen to fade"
    )
    return Outcome(
        values={
            "size": size,
            "time_s": float(TIMES_S[at]),
            "seen": seen,
            "off": likely_off,
            "off_at_most": worst_off,
        },
        se={"size": se},
        verdict="pass" if worst_off <= limit else "doubtful" if likely_off <= limit else "fail",
        sentence=(
            f"After a move {said}; with the wait of {wait_s:g} s a visit is off by "
            f"{f'{likely_off:.1e}, ' if seen else ''}at most {worst_off:.1e}, and {limit:.1e} is allowed."
        ),
        model="one exponential, its time on a grid",
        panels=(
            Panel(
                "Light after a move, all moves together",
                "time since the mask stood still [s]",
                "against the later gates",
                (
                    Curve(
                        since_s + GATE_S / 2,
                        summed / (MOVES * level.mean()),
                        "gates",
                        np.sqrt(summed) / (MOVES * level.mean()),
                    ),
                ),
            ),
        ),
        chi2=float(found.chi2[at]),
        dof=GATES - 3,
    )


TASK = Task(
    name="settle",
    purpose="What the light does right after a move of the mask, and whether the described wait is enough.",
    days=90,
    holds_for=("axes",),
    lacks=counts_only,
    asks=_asks,
    fit=_fit,
)
