"""Backlash: how far apart the mask ends after moves up and down, and how well it comes back.

After the manner of tests of positioning; it is not one by a standard.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import sqrt

import numpy as np
from scipy.special import ndtri
from scipy.stats import norm

from daq.estimate.arrays import FloatArray
from daq.estimate.regression import weighted_fit
from daq.tasks.contract import (
    Ask,
    Curve,
    Outcome,
    Panel,
    Setting,
    Taken,
    Task,
    counts_only,
    hopeless,
    level,
    once,
    worst,
)
from daq.tasks.encoder import Seen, seen_by

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


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    flanks = {name: _flank(setting, taken, name) for name in _flanks(setting)}
    found = {name: reversal(one.moved, one.off_mm) for name, one in flanks.items()}
    play = float(np.mean([one[0] for one in found.values()]))
    play_se = sqrt(sum(one[1] ** 2 for one in found.values())) / len(found)
    counting_var = float(np.mean([one.counting_var for one in flanks.values()]))
    chance = sqrt(max(float(np.mean([one[2] ** 2 for one in found.values()])) - counting_var, 0.0))
    margin = min(float(one) for one in setting.earlier["register"]["margin_mm"].values())
    wanted = abs(play) / 2 + REPEATABILITY * chance
    both = wanted <= margin
    take_up = 0.0 if both else 2 * abs(play) + 5 * chance
    encoder = seen_by(
        [one.encoder_mm for one in flanks.values()],
        [one.place_mm for one in flanks.values()],
        sqrt(counting_var),
    )
    how = (
        "moves from both sides are allowed"
        if both
        else f"approach from one side, {1e3 * take_up:.0f} um of take-up"
    )
    return Outcome(
        values={
            "play_mm": play,
            "repeat_mm": chance,
            "by_window_mm": {name: one[0] for name, one in found.items()},
            "wanted_mm": wanted,
            "margin_mm": margin,
            "take_up_mm": take_up,
            "encoder_slope": encoder.slope,
            "encoder_left_mm": encoder.left_mm,
        },
        se={
            "play_mm": play_se,
            "by_window_mm": {name: one[1] for name, one in found.items()},
            "encoder_slope": encoder.se,
        },
        verdict=worst("pass" if both else "fail", "pass" if encoder.scaled else "doubtful"),
        sentence=(
            f"Moves up and down end {1e3 * play:.1f} +- {1e3 * play_se:.1f} um apart and scatter by "
            f"{1e3 * chance:.1f} um; {1e3 * wanted:.0f} um of {1e3 * margin:.0f} of margin are wanted: "
            f"{how}; {encoder.said}."
        ),
        model="offset, reversal and steady creep",
        panels=_panels(flanks, play, encoder),
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
