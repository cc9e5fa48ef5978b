"""Plateau: how the detector answers to its bias or threshold; a person turns it, the program never does.

What is common to all openings cancels in kappa; a gain that depends on the rate does not, so the slope is
measured with much light and with little.
"""

from __future__ import annotations

from collections.abc import Sequence
from math import sqrt

import numpy as np

from daq import openings
from daq.description.by_hand import Dial
from daq.estimate.arrays import FloatArray
from daq.tasks.contract import (
    Ask,
    Curve,
    Outcome,
    Panel,
    Setting,
    Taken,
    Task,
    Verdict,
    counts_only,
    hopeless,
    once,
    worst,
)
from daq.tasks.knee import Plateau, plateau
from daq.tasks.turns import set_detector, told_once

BRIGHT, DIM, DARK = "bright", "dim", "dark"
SETTINGS = 11
DWELL_S = {BRIGHT: 5.0, DIM: 10.0, DARK: 5.0}
STEEP = 0.1  # of the rate over the whole dial: more is no plateau
WANDER = 1e-3  # of the rate: what the dial's own wander may make
SEEN = 5.0  # errors: with less light above dark there is none


def _lacks(setting: Setting) -> Sequence[str]:
    known = setting.rig.by_hand.detector
    missing = "the rig does not say what is set on the detector by hand (by_hand.detector)."
    return (*counts_only(setting), *(() if known else (missing,)))


def _dial(setting: Setting) -> Dial:
    dial = setting.rig.by_hand.detector
    assert dial is not None  # `lacks` has seen to it
    return dial


def _visits(setting: Setting) -> Sequence[Ask]:
    """Return bright, dim and dark visits at settings up and down, between settings as they are now."""
    dial, yard = _dial(setting), setting.yardstick
    up = [round(float(at), 6) for at in np.linspace(dial.low, dial.high, SETTINGS)]
    shown = {BRIGHT: yard.opening, DIM: openings.mask("A"), DARK: 0}
    found = []
    for at in (dial.now, *up, *up[::-1], dial.now):
        for role, opening in shown.items():
            beam = setting.shut_beam if role == DARK else setting.open_beam
            turn = set_detector(dial, at) if role == BRIGHT else None
            found.append(
                Ask(f"{role} {at:g}", DWELL_S[role], yard.position_mm, opening, beam=beam, turn=turn)
            )
    return told_once(found)


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    dial = _dial(setting)
    at = _settings(taken)
    dark = _rates(setting, taken, DARK)
    found, logs = {}, {}
    for role in (BRIGHT, DIM):
        rate, se = _rates(setting, taken, role)
        if not np.max((rate - dark[0]) / np.hypot(se, dark[1])) > SEEN:
            raise hopeless(
                "plateau",
                "no more is counted with light than without, at any setting",
                "See that light falls on the detector, then repeat; set the dial back first",
            )
        light = np.maximum(rate - dark[0], se)
        logs[role] = np.log(light), np.sqrt(se**2 + dark[1] ** 2) / light
        found[role] = plateau(at, *logs[role], np.arange(len(at), dtype=float))
    bright, dim = found[BRIGHT], found[DIM]
    apart = (bright.slope - dim.slope) / sqrt(bright.se**2 + dim.se**2)
    begins = max((one.begins for one in found.values() if one.begins is not None), default=None)
    start = dial.low if begins is None else begins
    choose = start + (dial.high - start) / 3
    near_hz = float(np.mean(dark[0][np.argsort(np.abs(at - choose))[:2]]))
    what = "with the beam shut" if setting.shutter else "behind shut slits"
    verdict = worst(_stands(bright, begins, dial), "pass" if abs(apart) <= 3 else "doubtful")
    return Outcome(
        values={
            "unit": dial.unit,
            "settings": at.tolist(),
            "bright_hz": _rates(setting, taken, BRIGHT)[0].tolist(),
            "dim_hz": _rates(setting, taken, DIM)[0].tolist(),
            "dark_hz": dark[0].tolist(),
            "slope": bright.slope,
            "slope_dim": dim.slope,
            "apart": apart,
            "begins": begins,
            "choose": choose,
            "now": dial.now,
            "counts": float(sum(reading.values[0] for _, reading in taken)),
        },
        se={"slope": bright.se, "slope_dim": dim.se},
        verdict=verdict,
        sentence=_sentence(dial, bright, dim, apart, begins, choose, f"{near_hz:.3g} a second {what}"),
        model="a line over the middle third above the knee",
        panels=_panels(dial, at, logs, found, dark, begins),
        chi2=bright.chi2 + dim.chi2,
        dof=bright.dof + dim.dof,
    )


def _settings(taken: Sequence[Taken]) -> FloatArray:
    """Return what was set, in the order of the visits: what the instrument showed, where it was typed."""
    found: list[float] = []
    for ask, _ in taken:
        if ask.turn is not None:
            found.append(ask.turn.value if ask.turn.shown is None else ask.turn.shown)
        elif ask.role.startswith(BRIGHT):
            found.append(found[-1])
    return np.array(found)


def _rates(setting: Setting, taken: Sequence[Taken], role: str) -> tuple[FloatArray, FloatArray]:
    """Return rates of a role with the described dead time taken out, and their errors [1/s]."""
    mine = [reading for ask, reading in taken if ask.role.split()[0] == role]
    counts = np.array([reading.values[0] for reading in mine], float)
    live_s = np.array([reading.live_s for reading in mine])
    return setting.true_hz(counts / live_s), np.sqrt(np.maximum(counts, 1.0)) / live_s


def _stands(found: Plateau, begins: float | None, dial: Dial) -> Verdict:
    steep = abs(found.slope) * (dial.high - dial.low) > STEEP
    slipping = begins is not None and dial.now < begins
    wanders = abs(found.slope) * dial.wanders > WANDER
    return "fail" if steep or slipping else "doubtful" if wanders else "pass"


def _sentence(
    dial: Dial,
    bright: Plateau,
    dim: Plateau,
    apart: float,
    begins: float | None,
    choose: float,
    dark: str,
) -> str:
    if abs(bright.slope) * (dial.high - dial.low) > STEEP:
        return (
            f"No plateau is seen between {dial.low:g} and {dial.high:g} {dial.unit}: the rate goes on rising "
            f"by {_by(dial, bright.slope, bright.se)}."
        )
    where = f"below {dial.low:g}" if begins is None else f"at {begins:.4g}"
    slips = begins is not None and dial.now < begins
    alike = (
        "as with little light"
        if abs(apart) <= 3
        else f"but {_by(dial, dim.slope, dim.se)} with little light: the gain depends on the rate"
    )
    return (
        f"The plateau begins {where} {dial.unit} and rises by {_by(dial, bright.slope, bright.se)}, {alike}; "
        f"{dial.now:g} {dial.unit} stands {'on the slope below' if slips else 'on'} it, and {choose:.4g} "
        f"{dial.unit} (its lower third, {dark}) is advised; the program sets none."
    )


def _by(dial: Dial, slope: float, se: float) -> str:
    many = 100.0 if dial.unit == "V" else 1.0
    unit = f"{many:g} {dial.unit}" if many > 1 else dial.unit
    return f"{100 * many * slope:.2f} +- {100 * many * se:.2f} % for {unit}"


def _panels(
    dial: Dial,
    at: FloatArray,
    logs: dict[str, tuple[FloatArray, FloatArray]],
    found: dict[str, Plateau],
    dark: tuple[FloatArray, FloatArray],
    begins: float | None,
) -> tuple[Panel, ...]:
    label = f"{dial.what} [{dial.unit}]"
    places = np.linspace(at.min(), at.max(), 50)
    marks = {"now": dial.now} | ({} if begins is None else {"begins": begins})
    least = float(at.min()) if begins is None else begins
    far, close, above = [], [], places >= least
    for role, (log_rate, se) in logs.items():
        off, line = (one - found[role].level for one in (log_rate, found[role].line(places)))
        far.append(Curve(at, np.exp(off), role, np.exp(off) * se))
        close.append(Curve(at[at >= least], 100 * off[at >= least], role, 100 * se[at >= least]))
        close.append(Curve(places[above], 100 * line[above], f"{role}, line", line=True))
    behind = (Curve(at, dark[0], DARK, dark[1]),)
    return (
        Panel("Rate above dark", label, "against the plateau", tuple(far), marks),
        Panel("The plateau, close by", label, "off its middle [%]", tuple(close), {"now": dial.now}),
        Panel("Without the light of the slits", label, "counts a second", behind, {"now": dial.now}),
    )


TASK = Task(
    name="plateau",
    purpose="How the detector answers to its bias or threshold; a person turns it, the program measures.",
    days=30,
    holds_for=("devices",),
    lacks=_lacks,
    asks=once(_visits),
    fit=_fit,
)
