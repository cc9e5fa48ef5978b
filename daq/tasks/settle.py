"""Settle: what the light does right after long and short moves of the mask, and whether the wait is enough.

Gates follow one another from the moment at which nothing moves any more; no slices are needed.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from scipy.stats import chi2 as chi2_distribution

from daq.estimate.arrays import FloatArray
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, once
from daq.tasks.panels import Curve, Panel
from daq.tasks.refusals import refuse_dark
from daq.tasks.verdicts import ODD_P, Verdict, worst

GATE_S, GATES, MOVES = 0.2, 8, 40
TIMES_S = np.geomspace(0.03, 1.0, 36)
ALLOWED = 4.0  # of chi2 above its least: two standard errors
SEEN = 3.0  # standard errors
LONG, SHORT = "long", "short"


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


@dataclass(frozen=True, slots=True)
class Stroke:
    """What fades after moves of one length: gates summed over moves, since when, and the fit."""

    way_mm: float
    counts: FloatArray
    since_s: FloatArray
    found: Transient

    @property
    def size(self) -> float:
        """The size that fits best."""
        return float(self.found.size[self.found.best])

    @property
    def se(self) -> float:
        """The standard error of the size."""
        return float(self.found.se[self.found.best])

    @property
    def seen(self) -> bool:
        """Whether anything fades."""
        return abs(self.size) > SEEN * self.se

    def off(self, wait_s: float, dwell_s: float) -> tuple[float, float]:
        """Return what a visit that waits is off by, likely and at most."""
        found = self.found
        near = found.chi2 <= found.chi2[found.best] + ALLOWED
        likely = float(found.bias(wait_s, dwell_s, 0.0)[found.best]) if self.seen else 0.0
        return likely, float(found.bias(wait_s, dwell_s, 2.0)[near].max())

    def wait_s(self, dwell_s: float, limit: float) -> float:
        """Return the wait after which a visit is off by no more than a limit, at most [s]."""
        found = self.found
        near = found.chi2 <= found.chi2[found.best] + ALLOWED
        times_s, now = TIMES_S[near], found.bias(0.0, dwell_s, 2.0)[near]
        return float(np.max(times_s * np.log(np.maximum(now / limit, 1.0))))


def _strokes_mm(setting: Setting) -> dict[str, float]:
    """Return where the mask comes from in the longest and the shortest move to the fullest opening."""
    rig, opening = setting.rig, setting.yardstick.opening
    here = rig.mask_at_mm(opening)
    others = sorted(
        (rig.mask_at_mm(mask) for mask in rig.opening_masks if mask != opening), key=lambda at: abs(at - here)
    )
    return {LONG: others[-1], SHORT: others[0]}


def _visits(setting: Setting) -> Sequence[Ask]:
    yard, beam = setting.yardstick, setting.open_beam
    return [
        Ask(
            f"{stroke} {gate}",
            GATE_S,
            yard.position_mm,
            yard.opening,
            via_mm=None if gate else via_mm,
            early=True,
            beam=beam,
        )
        for _ in range(MOVES)
        for stroke, via_mm in _strokes_mm(setting).items()
        for gate in range(GATES)
    ]


def _stroke(setting: Setting, taken: Sequence[Taken], name: str) -> Stroke:
    mine = [reading for ask, reading in taken if ask.role.split()[0] == name]
    counts = np.array([reading.values[0] for reading in mine], float).reshape(MOVES, GATES)
    opened = np.array([reading.gate_open_ns for reading in mine], float).reshape(MOVES, GATES) / 1e9
    since_s = (opened - opened[:, :1]).mean(axis=0)
    even = counts[:, GATES // 2 :].mean(axis=1, keepdims=True)  # the source drifts from move to move
    summed = np.asarray((counts / even).sum(axis=0) * even.mean())
    refuse_dark("settle", setting, float(counts.mean()) / GATE_S)
    way_mm = abs(_strokes_mm(setting)[name] - setting.rig.mask_at_mm(setting.yardstick.opening))
    return Stroke(way_mm, summed, since_s, transient(summed, since_s, GATE_S))


def apart_p(one: FloatArray, other: FloatArray) -> float:
    """Return how probable it is that the gates after two kinds of moves differ as much by chance."""
    first, second = one / one.mean(), other / other.mean()
    variance = first / one.mean() + second / other.mean()
    return float(chi2_distribution.sf(np.sum((first - second) ** 2 / variance), len(one) - 1))


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    strokes = {name: _stroke(setting, taken, name) for name in (LONG, SHORT)}
    wait_s = setting.rig.axes[setting.rig.mask.axis].settle_s
    dwell_s = setting.measurement.itinerary.dwell_s or 1.0
    limit = setting.yardstick.rate_error
    off = {name: one.off(wait_s, dwell_s) for name, one in strokes.items()}
    waits_s = {name: one.wait_s(dwell_s, limit) for name, one in strokes.items()}
    p = apart_p(*(one.counts for one in strokes.values()))
    said = "; ".join(_said(name, strokes[name], *off[name], waits_s[name]) for name in strokes)
    return Outcome(
        values=_values(strokes, off) | {"wait_s": waits_s, "apart_p": p},
        se={"size": {name: one.se for name, one in strokes.items()}},
        verdict=worst(*(_verdict(likely, most, limit) for likely, most in off.values())),
        sentence=(
            f"{said[0].upper()}{said[1:]}; {_alike(p)}. The wait is {wait_s:g} s, and a visit may be off "
            f"by {limit:.1e}."
        ),
        model="one exponential, its time on a grid",
        panels=tuple(_panel(name, one) for name, one in strokes.items()),
        chi2=float(sum(one.found.chi2[one.found.best] for one in strokes.values())),
        dof=2 * (GATES - 3),
    )


def _values(strokes: Mapping[str, Stroke], off: Mapping[str, tuple[float, float]]) -> dict[str, Any]:
    return {
        "stroke_mm": {name: one.way_mm for name, one in strokes.items()},
        "size": {name: one.size for name, one in strokes.items()},
        "time_s": {name: float(TIMES_S[one.found.best]) for name, one in strokes.items()},
        "seen": {name: one.seen for name, one in strokes.items()},
        "off": {name: likely for name, (likely, _) in off.items()},
        "off_at_most": {name: most for name, (_, most) in off.items()},
    }


def _alike(p: float) -> str:
    return "long and short moves are alike" if p >= ODD_P else f"long and short moves differ (p = {p:.1g})"


def _said(name: str, stroke: Stroke, likely: float, most: float, wait_s: float) -> str:
    fades = (
        f"{100 * stroke.size:+.2f} +- {100 * stroke.se:.2f} % fades in {TIMES_S[stroke.found.best]:.2f} s"
        if stroke.seen
        else "nothing is seen to fade"
    )
    by = f"{likely:.1e}, at most {most:.1e}" if stroke.seen else f"at most {most:.1e}"
    enough = f", and {wait_s:.2f} s would do" if stroke.seen else ""
    return f"after a {name} move ({stroke.way_mm:g} mm) {fades}, a visit is off by {by}{enough}"


def _verdict(likely: float, most: float, limit: float) -> Verdict:
    return "pass" if most <= limit else "doubtful" if likely <= limit else "fail"


def _panel(name: str, stroke: Stroke) -> Panel:
    mean = float(stroke.counts[GATES // 2 :].mean())
    fading = np.linspace(0.0, float(stroke.since_s[-1]) + GATE_S, 200)
    time_s = TIMES_S[stroke.found.best]
    far = stroke.counts - mean * stroke.size * np.exp(-stroke.since_s / time_s) * _faded(time_s)
    line = (1 + stroke.size * np.exp(-fading / time_s)) * float(far.mean()) / mean
    gates = Curve(stroke.since_s + GATE_S / 2, stroke.counts / mean, "gates", np.sqrt(stroke.counts) / mean)
    return Panel(
        f"Light after a {name} move ({stroke.way_mm:g} mm), all moves together",
        "time since the mask stood still [s]",
        "against the later gates",
        (gates, Curve(fading, np.asarray(line), "fit, at every moment", line=True)),
    )


def _faded(time_s: float) -> float:
    """Return the mean of a fading over a gate against its start."""
    return float(-np.expm1(-GATE_S / time_s) * time_s / GATE_S)


TASK = Task(
    name="settle",
    purpose="What the light does right after moves of the mask, long and short, and what wait is enough.",
    days=90,
    holds_for=("axes",),
    asks=once(_visits),
    fit=_fit,
)
