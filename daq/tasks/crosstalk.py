"""Crosstalk: what a visit has of the one before, of the direction it is come to, and of slits that are shut.

Stands there and back at the brightest place, then slits alone at both ends of the detector's travel, where
little light of theirs should fall.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np
from scipy.stats import norm

from daq import openings
from daq.description.measurement import Positions
from daq.estimate.arrays import FloatArray
from daq.itinerary import expected_rates
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, once
from daq.tasks.memory import Memory, memory
from daq.tasks.panels import Curve, Panel, level
from daq.tasks.refusals import refuse_dark
from daq.tasks.stands import by_stand, there_and_back
from daq.tasks.verdicts import Verdict, worst

STANDS, DWELL_S = 60, 2.0
FAR, FAR_ROUNDS, FAR_S = "far", 5, 10.0
NOTED, DOUBTED = 3.0, 4.0  # standard errors


def _visits(setting: Setting) -> Sequence[Ask]:
    return [*there_and_back(setting, STANDS, DWELL_S), *_far(setting)]


def _ends_mm(setting: Setting) -> tuple[float, float]:
    return setting.rig.axes[setting.rig.detector.axis].limits_mm


def _alone(setting: Setting) -> list[int]:
    return [mask for mask in setting.rig.opening_masks if mask.bit_count() == 1]


def _far(setting: Setting) -> list[Ask]:
    shown = [0, *_alone(setting)]
    return [
        Ask(FAR, FAR_S, place, opening, beam=setting.open_beam)
        for place in _ends_mm(setting)
        for _ in range(FAR_ROUNDS)
        for opening in (*shown, *shown[::-1])
    ]


def leaks(setting: Setting, taken: Sequence[Taken]) -> tuple[FloatArray, FloatArray]:
    """Return the light beyond the described one of slits alone, against their mean, by end of travel (2, N).

    With standard errors [1/s]: what leaks past shut slits is not alike for all of them.
    """
    alone = _alone(setting)
    over, se = np.zeros((2, 2, len(alone)))
    for end, place in enumerate(_ends_mm(setting)):
        none_hz, none_var = _rate(setting, taken, place, 0)
        for column, mask in enumerate(alone):
            rate_hz, rate_var = _rate(setting, taken, place, mask)
            over[end, column] = rate_hz - none_hz - _described_hz(setting, place, mask)
            se[end, column] = sqrt(rate_var + none_var)
    spread = np.sqrt(1 - 1 / len(alone))
    return over - over.mean(axis=1, keepdims=True), se * spread


def _described_hz(setting: Setting, place_mm: float, mask: int) -> float:
    """Return the light of a slit alone as described [1/s], its pattern about its own middle."""
    (slit,) = setting.rig.slits_of(mask).values()
    here = Positions(list_mm=(place_mm - 1e3 * slit.centre_m,))
    rates = expected_rates(setting.measurement.model_copy(update={"positions": here}), setting.rig)[0]
    return float(rates[list(setting.rig.opening_masks).index(mask)] - rates[0])


def _rate(setting: Setting, taken: Sequence[Taken], place_mm: float, opening: int) -> tuple[float, float]:
    mine = [
        r for ask, r in taken if ask.role == FAR and ask.position_mm == place_mm and ask.opening == opening
    ]
    counts, live_s = sum(r.values[0] for r in mine), sum(r.live_s for r in mine)
    return float(setting.true_hz(np.asarray(counts / live_s))), max(counts, 1.0) / live_s**2


def _memory(setting: Setting, taken: Sequence[Taken]) -> Memory:
    stands = [one for one in taken if one[0].role != FAR]
    masks = list(setting.rig.opening_masks)
    rate = by_stand(setting, stands, lambda r: float(setting.true_hz(np.asarray(r.values[0] / r.live_s))))
    live_s = by_stand(setting, stands, lambda r: r.live_s)
    refuse_dark("crosstalk", setting, float(rate.mean(axis=0).max()))
    middle_s = by_stand(setting, stands, lambda r: (r.gate_open_ns + r.gate_close_ns) / 2e9)
    order = [masks.index(ask.opening) for ask, _ in stands[: len(masks)]]
    before = np.zeros(rate.shape, int)
    for stand in range(len(rate)):
        row = order if stand % 2 == 0 else order[::-1]
        before[stand, row] = [row[0], *row[:-1]]
    return memory(np.maximum(rate * live_s, 0.5), middle_s, before)


@dataclass(frozen=True, slots=True)
class _Found:
    """The memory and what it does to kappa, and the light of slits alone far out, by end of travel (2, N)."""

    memory: Memory
    shift: float
    shift_se: float
    over_hz: FloatArray
    over_se_hz: FloatArray
    masks: list[str]
    alone: list[str]

    @property
    def signs(self) -> dict[str, float]:
        """By how many standard errors each is off."""
        return {
            "the memory": abs(self.memory.share) / self.memory.se,
            "the direction": float(norm.isf(self.memory.p / 2)),
            "the light far out": float(np.max(np.abs(self.over_hz / self.over_se_hz))),
        }


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    found = _found(setting, taken)
    values, se = _values(setting, found)
    moves = _moves_kappa(found.shift, found.shift_se, setting.yardstick.allowed)
    return Outcome(
        values=values,
        se=se,
        verdict=worst(moves, _odd(found.signs)),
        sentence=_sentence(setting, found),
        model="shares of stands there and back, a share of the visit before",
        panels=_panels(found),
        chi2=found.memory.chi2,
        dof=found.memory.dof,
    )


def _found(setting: Setting, taken: Sequence[Taken]) -> _Found:
    seen, per = _memory(setting, taken), setting.yardstick.per_memory
    return _Found(
        seen,
        seen.share * per,
        abs(seen.se * per),
        *leaks(setting, taken),
        [openings.name(mask) for mask in setting.rig.opening_masks],
        [openings.name(mask) for mask in _alone(setting)],
    )


def _values(setting: Setting, found: _Found) -> tuple[dict[str, Any], dict[str, Any]]:
    seen = found.memory
    values = {
        "memory": seen.share,
        "kappa_shift": found.shift,
        "direction": dict(zip(found.masks, seen.direction.tolist(), strict=True)),
        "direction_p": seen.p,
        "far_hz": dict(zip(found.alone, found.over_hz.T.tolist(), strict=True)),
        "far_mm": list(_ends_mm(setting)),
    }
    se = {
        "memory": seen.se,
        "kappa_shift": found.shift_se,
        "direction": dict(zip(found.masks, seen.direction_se.tolist(), strict=True)),
        "far_hz": dict(zip(found.alone, found.over_se_hz.T.tolist(), strict=True)),
    }
    return values, se


def _sentence(setting: Setting, found: _Found) -> str:
    seen, over, over_se = found.memory, found.over_hz, found.over_se_hz
    most = int(np.argmax(np.abs(seen.direction / seen.direction_se)))
    end, slit = np.unravel_index(int(np.argmax(np.abs(over / over_se))), over.shape)
    return (
        f"A visit sees {1e4 * seen.share:+.1f} +- {1e4 * seen.se:.1f} in 1e4 of the one before, which moves "
        f"kappa by {found.shift:+.1e} +- {found.shift_se:.1e} ({setting.yardstick.allowed:.1e} allowed); "
        f"{found.masks[most]} is off most there and back (p = {seen.p:.2g} for all); of the slits alone, far "
        f"out, {found.alone[slit]} is off most, {over[end, slit]:+.2g} +- {over_se[end, slit]:.2g} a "
        f"second{_noted(found.signs)}."
    )


def _moves_kappa(shift: float, se: float, allowed: float) -> Verdict:
    """Return "fail" where kappa is moved for certain by more than is allowed."""
    return "fail" if abs(shift) - NOTED * se > allowed else "pass"


def _odd(signs: dict[str, float]) -> Verdict:
    return "doubtful" if max(signs.values()) > DOUBTED else "pass"


def _noted(signs: dict[str, float]) -> str:
    odd = [f"{what} ({size:.1f} errors)" for what, size in signs.items() if size > NOTED]
    return f"; look at {' and '.join(odd)}" if odd else ""


def _panels(found: _Found) -> tuple[Panel, ...]:
    at, slits = np.arange(float(len(found.masks))), np.arange(float(len(found.alone)))
    direction, direction_se = 1e4 * found.memory.direction, 1e4 * found.memory.direction_se
    ends = [
        Curve(slits + 0.1 * end, found.over_hz[end], f"{word} end of travel", found.over_se_hz[end])
        for end, word in enumerate(("lower", "upper"))
    ]
    return (
        Panel(
            "Openings there less back, the memory taken out",
            "opening",
            "log, in 1e4",
            (Curve(at, direction, "measured", direction_se), level(at, 0.0, "alike")),
            names=found.masks,
        ),
        Panel(
            "Slits alone far out, against the described light and their mean",
            "slit alone",
            "counts a second",
            (*ends, level(slits, 0.0, "as described")),
            names=found.alone,
        ),
    )


TASK = Task(
    name="crosstalk",
    purpose="What a visit has of the one before, of the direction it is come to, and of slits that are shut.",
    days=30,
    holds_for=("chip", "devices"),
    asks=once(_visits),
    fit=_fit,
)
