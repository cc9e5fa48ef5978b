"""Backlash: how far apart the mask ends after moves up and down, and how well it comes back.

After the manner of tests of positioning; it is not one by a standard.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import sqrt

import numpy as np
from scipy.special import ndtri

from daq.estimate.arrays import FloatArray
from daq.estimate.regression import weighted_fit
from daq.tasks.contract import Ask, Curve, Outcome, Panel, Setting, Taken, Task, counts_only, hopeless, once
from daq.tasks.windows import ramp_mm

REPEATS, DWELL_S, TAKE_UP_MM = 10, 1.0, 0.5
PATTERN = (1, -1, -1, 1)  # up, down, down, up: a steady creep cancels
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
            place_mm=round(flank, 4),
            via_mm=float(np.clip(flank - sign * TAKE_UP_MM, low, high)),
        )
        for name, (flank, _) in _flanks(setting).items()
        for _ in range(REPEATS // 2)
        for sign in PATTERN
    ]


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    found = {}
    curves = []
    for name, (_, edge) in _flanks(setting).items():
        mine = [(ask, reading) for ask, reading in taken if ask.role.endswith(f" {name}")]
        moved = np.array([float(ask.role.split()[0]) for ask, _ in mine])
        counts = np.array([reading.values[0] for _, reading in mine], float)
        place = _places_mm(setting, name, counts, edge)
        found[name] = (*reversal(moved, place), float(np.median(counts)), edge)
        for sign, word in ((1, "up"), (-1, "down")):
            at = np.flatnonzero(moved == sign)
            curves.append(Curve(at.astype(float), 1e3 * place[at], f"{name}, {word}"))
    play = float(np.mean([one[0] for one in found.values()]))
    play_se = sqrt(sum(one[1] ** 2 for one in found.values())) / len(found)
    counting = [ramp_mm(edge) / (2 * sqrt(counts)) for *_, counts, edge in found.values()]
    chance = sqrt(
        max(float(np.mean([one[2] ** 2 for one in found.values()]) - np.mean(np.square(counting))), 0.0)
    )
    margin = min(float(one) for one in setting.earlier["register"]["margin_mm"].values())
    wanted = abs(play) / 2 + REPEATABILITY * chance
    both = wanted <= margin
    how = (
        "moves from both sides are allowed"
        if both
        else f"approach from one side, {1e3 * (2 * abs(play) + 5 * chance):.0f} um of take-up"
    )
    return Outcome(
        values={
            "play_mm": play,
            "repeat_mm": chance,
            "by_window_mm": {name: one[0] for name, one in found.items()},
            "wanted_mm": wanted,
            "margin_mm": margin,
            "take_up_mm": 0.0 if both else 2 * abs(play) + 5 * chance,
        },
        se={"play_mm": play_se, "by_window_mm": {name: one[1] for name, one in found.items()}},
        verdict="pass" if both else "fail",
        sentence=(
            f"Moves up and down end {1e3 * play:.1f} +- {1e3 * play_se:.1f} um apart and scatter by "
            f"{1e3 * chance:.1f} um; {1e3 * wanted:.0f} um of {1e3 * margin:.0f} of margin are wanted: {how}."
        ),
        model="offset, reversal and steady creep",
        panels=(Panel("Where moves to a flank end", "visit", "off the flank [um]", tuple(curves)),),
    )


def _places_mm(setting: Setting, name: str, counts: FloatArray, edge_mm: float) -> FloatArray:
    """Return how far from the flank each visit stood, from its counts on the edge [mm]."""
    known = setting.earlier["register"]["up"][name]
    rate = setting.true_hz(counts / DWELL_S)
    share = (rate * setting.earlier["register"]["gate_s"] - known["background"]) / known["height"]
    if not np.all((share > 0.02) & (share < 0.98)):
        raise hopeless(
            NAME,
            f"the flank of {name} is not where it was: {100 * float(share.min()):.0f} to "
            f"{100 * float(share.max()):.0f} % of the light",
            "Do register again; nothing was moved further",
        )
    return np.asarray(edge_mm * ndtri(share))


TASK = Task(
    name=NAME,
    purpose="How far apart the mask ends after moves up and down, and how well it comes back.",
    days=90,
    holds_for=("axes",),
    lacks=_lacks,
    asks=once(_visits),
    fit=_fit,
)
