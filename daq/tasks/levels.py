"""Levels: a monitor against the detector while attenuators before both take light away, level by level."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.tasks.contract import Ask, Setting, Taken
from daq.tasks.panels import Curve, Panel
from daq.tasks.turns import put_attenuator

LEVEL, DARK = "level", "level dark"
DWELL_S, ROUNDS = 5.0, 2
FREE = 2  # parameters of the line


@dataclass(frozen=True, slots=True)
class Bend:
    """How much more a monitor shows at its top than a straight one (relative), its error, and how it fits."""

    share: float
    se: float
    chi2: float
    dof: int


def level_visits(setting: Setting) -> list[Ask]:
    """Return visits down the levels and up again, in the end with none in the beam; none without a list."""
    shares = setting.rig.by_hand.attenuators
    if not shares:
        return []
    yard = setting.yardstick
    found = [
        Ask(
            LEVEL, DWELL_S, yard.position_mm, yard.opening, beam=setting.open_beam, turn=put_attenuator(share)
        )
        for _ in range(ROUNDS)
        for share in (*shares, *shares[::-1])
    ]
    out = setting.shut_beam or setting.open_beam
    role = DARK if setting.shutter else LEVEL
    return [*found, Ask(role, DWELL_S, yard.position_mm, yard.opening, beam=out, turn=put_attenuator(1.0))]


def bend(monitor: FloatArray, detector: FloatArray) -> Bend:
    """Return how a monitor bends, from counts of both at several levels of light.

    Notes
    -----
    Weighted least squares of ln(m/n) = c + b m/m_max, variance 1/m + 1/n; the error grows with the root of
    chi2 over freedom where that is above one.
    """
    top = monitor.max()
    width = np.sqrt(1 / monitor + 1 / detector)
    design = np.stack([np.ones(len(monitor)), monitor / top], axis=1) / width[:, None]
    inverse = np.linalg.inv(design.T @ design)
    ratio = np.log(monitor / detector) / width
    solved = inverse @ design.T @ ratio
    chi2, dof = float(np.sum((ratio - design @ solved) ** 2)), len(monitor) - FREE
    return Bend(float(solved[1]), float(np.sqrt(inverse[1, 1] * max(chi2 / dof, 1.0))), chi2, dof)


def bend_of(setting: Setting, taken: Sequence[Taken], channel: int) -> tuple[Bend, Panel] | None:
    """Return how the monitor bends and the picture of it; None where no level was taken."""
    rows = [(r.values[0], r.values[channel], r.live_s) for ask, r in taken if ask.role == LEVEL]
    if not rows:
        return None
    dark = [(r.values[0], r.values[channel], r.live_s) for ask, r in taken if ask.role == DARK]
    seen, watched, live_s = np.array(rows, float).T
    off = np.sum(dark, axis=0) / np.sum(dark, axis=0)[2] if dark else np.zeros(3)
    light = np.maximum((setting.true_hz(seen / live_s) - off[0]) * live_s, 1.0)
    shown = np.maximum(watched, 1.0)
    found = bend(shown, light)
    ratio = shown / light
    curve = Curve(
        shown / live_s, ratio / ratio.mean(), "levels", ratio / ratio.mean() * np.sqrt(1 / shown + 1 / light)
    )
    at = np.linspace(0, 1, 50)
    line = np.exp(found.share * at)
    line *= float(np.mean(curve.y)) / float(np.mean(np.exp(found.share * shown / shown.max())))
    fit = Curve(at * float((shown / live_s).max()), line, "fit", line=True)
    title = "The monitor against the detector, level by level"
    return found, Panel(title, "monitor, counts a second", "ratio over its mean", (curve, fit))
