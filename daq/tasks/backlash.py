"""Backlash: how far apart the mask ends after moves up and down, and how well it comes back.

After the manner of tests of positioning; it is not one by a standard.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np
from scipy.special import ndtri
from scipy.stats import norm

from daq.estimate.arrays import FloatArray
from daq.estimate.regression import weighted_fit
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, counts_only, once
from daq.tasks.encoder import Seen, seen_by
from daq.tasks.panels import Curve, Panel, level
from daq.tasks.refusals import hopeless
from daq.tasks.verdicts import worst

REPEATS, DWELL_S, TAKE_UP_MM = 10, 1.0, 0.5
PATTERN = (1, -1, -1, 1)  # up, down, down, up: a steady creep cancels
ASIDE = (0.0, -0.5, 0.5)  # of an edge: where the visits of a round stand, so that the encoder can be checked
REPEATABILITY = 4.0  # unidirectional, in standard deviations
NAME = "backlash"


def reversal(moved: FloatArray, place_mm: FloatArray) -> tuple[float, float, float]:
    """Return the reversal, its standard error and the scatter, from ends of moves up (+1) and down (-1) [mm].

    Notes
    -----
    Least squares of place = offset + (+-)B/2 + creep * number; the scatter is what is left.
    """
    number = np.arange(len(moved), dtype=float)
    design = np.stack([np.ones(len(moved)), moved / 2, number - number.mean()], axis=1)
    found = weighted_fit(design, place_mm, np.ones(len(moved)))
    scatter = sqrt(found.chi2 / found.dof)
    return float(found.coefficients[1]), scatter * sqrt(float(found.covariance[1, 1])), scatter


def _lacks(setting: Setting) -> Sequence[str]:
    if "register" in setting.earlier:
        return counts_only(setting)
    why = setting.missing.get("register", "never done in this lab")
    return (
        *counts_only(setting),
        f"it needs a valid record of register, and there is none ({why}): do that first.",
    )


def _flanks(setting: Setting) -> dict[str, tuple[float, float]]:
    """Return place and edge of the left flank of the first, the middle and the last window [mm]."""
    windows = setting.earlier["register"]["up"]
    names = sorted(windows, key=lambda name: float(windows[name]["centre_mm"]))
    chosen = (names[0], names[len(names) // 2], names[-1])
    return {
        name: (windows[name]["centre_mm"] - windows[name]["width_mm"] / 2, windows[name]["edge_mm"])
        for name in chosen
    }


def _visits(setting: Setting) -> Sequence[Ask]:
    place = float(setting.earlier["register"]["position_mm"])
    low, high = setting.rig.axes[setting.rig.mask.axis].limits_mm
    return [
        Ask(
            f"{sign:+d} {name}",
            DWELL_S,
            place,
            place_mm=round(flank + aside * edge, 4),
            via_mm=float(np.clip(flank + aside * edge - sign * TAKE_UP_MM, low, high)),
        )
        for name, (flank, edge) in _flanks(setting).items()
        for aside in np.resize(ASIDE, REPEATS // 2).tolist()
        for sign in PATTERN
    ]


@dataclass(frozen=True, slots=True)
class _Flank:
    """The visits at one flank: which way they came, where they ended off their targets, and the encoder."""

    moved: FloatArray
    place_mm: FloatArray
    encoder_mm: FloatArray
    off_mm: FloatArray
    counting_var: float  # of a place, by counting alone [mm^2]


@dataclass(frozen=True, slots=True)
class _Found:
    """What all flanks say together: play and chance, the play by window, the margin that is there."""

    play_mm: float
    play_se_mm: float
    chance_mm: float
    by_window_mm: Mapping[str, tuple[float, float]]  # with standard errors
    margin_mm: float
    encoder: Seen

    @property
    def wanted_mm(self) -> float:
        """What moves from both sides want of the margin."""
        return abs(self.play_mm) / 2 + REPEATABILITY * self.chance_mm

    @property
    def both(self) -> bool:
        """Whether moves from both sides may be allowed."""
        return self.wanted_mm <= self.margin_mm

    @property
    def take_up_mm(self) -> float:
        """How far to go beyond a place and come back, where one side is allowed."""
        return 0.0 if self.both else 2 * abs(self.play_mm) + 5 * self.chance_mm


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    flanks = {name: _flank(setting, taken, name) for name in _flanks(setting)}
    found = _together(setting, flanks)
    values, se = _values(found)
    return Outcome(
        values=values,
        se=se,
        verdict=worst("pass" if found.both else "fail", "pass" if found.encoder.scaled else "doubtful"),
        sentence=_sentence(found),
        model="offset, reversal and steady creep",
        panels=_panels(flanks, found.play_mm, found.encoder),
    )


def _together(setting: Setting, flanks: Mapping[str, _Flank]) -> _Found:
    found = {name: reversal(one.moved, one.off_mm) for name, one in flanks.items()}
    counting_var = float(np.mean([one.counting_var for one in flanks.values()]))
    scatter_var = float(np.mean([one[2] ** 2 for one in found.values()]))
    return _Found(
        play_mm=float(np.mean([one[0] for one in found.values()])),
        play_se_mm=sqrt(sum(one[1] ** 2 for one in found.values())) / len(found),
        chance_mm=sqrt(max(scatter_var - counting_var, 0.0)),
        by_window_mm={name: one[:2] for name, one in found.items()},
        margin_mm=min(float(one) for one in setting.earlier["register"]["margin_mm"].values()),
        encoder=seen_by(
            [one.encoder_mm for one in flanks.values()],
            [one.place_mm for one in flanks.values()],
            sqrt(counting_var),
        ),
    )


def _values(found: _Found) -> tuple[dict[str, Any], dict[str, Any]]:
    values = {
        "play_mm": found.play_mm,
        "repeat_mm": found.chance_mm,
        "by_window_mm": {name: play for name, (play, _) in found.by_window_mm.items()},
        "wanted_mm": found.wanted_mm,
        "margin_mm": found.margin_mm,
        "take_up_mm": found.take_up_mm,
        "encoder_slope": found.encoder.slope,
        "encoder_left_mm": found.encoder.left_mm,
    }
    by_window_se = {name: play_se for name, (_, play_se) in found.by_window_mm.items()}
    se = {"play_mm": found.play_se_mm, "by_window_mm": by_window_se, "encoder_slope": found.encoder.se}
    return values, se


def _sentence(found: _Found) -> str:
    one_side = f"approach from one side, {1e3 * found.take_up_mm:.0f} um of take-up"
    how = "moves from both sides are allowed" if found.both else one_side
    return (
        f"Moves up and down end {1e3 * found.play_mm:.1f} +- {1e3 * found.play_se_mm:.1f} um apart and "
        f"scatter by {1e3 * found.chance_mm:.1f} um; {1e3 * found.wanted_mm:.0f} um of "
        f"{1e3 * found.margin_mm:.0f} of margin are wanted: {how}; {found.encoder.said}."
    )


def _flank(setting: Setting, taken: Sequence[Taken], name: str) -> _Flank:
    flank, edge = _flanks(setting)[name]
    mine = [(ask, reading) for ask, reading in taken if ask.role.endswith(f" {name}")]
    counts = np.array([reading.values[0] for _, reading in mine], float)
    targets = np.array([float(ask.place_mm or 0.0) for ask, _ in mine])
    share, height_hz = _shares(setting, name, counts)
    place = np.asarray(flank + edge * ndtri(share))
    slope = height_hz * DWELL_S * norm.pdf(ndtri(share)) / edge
    axis = setting.rig.mask.axis
    encoder = [
        reading.encoder_mm.get(axis, (at, at))[0] for at, (_, reading) in zip(targets, mine, strict=True)
    ]
    return _Flank(
        np.array([float(ask.role.split()[0]) for ask, _ in mine]),
        place,
        np.array(encoder),
        place - targets,
        float(np.mean(counts / slope**2)),
    )


def _shares(setting: Setting, name: str, counts: FloatArray) -> tuple[FloatArray, float]:
    """Return the share of the window's light in each visit, and all of that light [1/s]."""
    known, gate_s = setting.earlier["register"]["up"][name], setting.earlier["register"]["gate_s"]
    height_hz = known["height"] / gate_s
    share = np.asarray((setting.true_hz(counts / DWELL_S) - known["background"] / gate_s) / height_hz)
    if not np.all((share > 0.02) & (share < 0.98)):
        raise hopeless(
            NAME,
            f"the flank of {name} is not where it was: {100 * float(share.min()):.0f} to "
            f"{100 * float(share.max()):.0f} % of the light",
            "Do register again; nothing was moved further",
        )
    return share, height_hz


def _panels(flanks: Mapping[str, _Flank], play_mm: float, encoder: Seen) -> tuple[Panel, ...]:
    ends, over = [], []
    for name, one in flanks.items():
        for sign, word in ((1, "up"), (-1, "down")):
            at = np.flatnonzero(one.moved == sign)
            ends.append(Curve(at.astype(float), 1e3 * one.off_mm[at], f"{name}, {word}"))
        x, y = (1e3 * (part - part.mean()) for part in (one.encoder_mm, one.place_mm))
        over.append(Curve(x, y, name))
    middle = float(np.mean([one.off_mm.mean() for one in flanks.values()]))
    number = np.arange(float(max(len(one.off_mm) for one in flanks.values())))
    ends += [
        level(number, 1e3 * (middle + side * play_mm / 2), f"{word}, fitted")
        for side, word in ((1, "up"), (-1, "down"))
    ]
    reach = np.array([min(float(one.x.min()) for one in over), max(float(one.x.max()) for one in over)])
    over.append(Curve(reach, encoder.slope * reach, f"slope {encoder.slope:.3f}", line=True))
    return (
        Panel("Where moves to a flank end", "visit", "off the target [um]", tuple(ends)),
        Panel("Places by counts over places by encoder", "encoder [um]", "counts [um]", tuple(over)),
    )


TASK = Task(
    name=NAME,
    purpose="How far apart the mask ends after moves up and down, and how well it comes back.",
    days=90,
    holds_for=("axes",),
    lacks=_lacks,
    asks=once(_visits),
    fit=_fit,
)
