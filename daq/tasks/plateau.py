"""Plateau: how the detector answers to its bias or threshold; a person turns it, the program never does.

What is common to all openings cancels in kappa; a gain that depends on the rate does not, so the slope is
measured with much light and with little.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np

from daq import openings
from daq.description.by_hand import Dial
from daq.estimate.arrays import FloatArray
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, counts_only, once
from daq.tasks.knee import Plateau, plateau
from daq.tasks.panels import Curve, Panel
from daq.tasks.refusals import hopeless
from daq.tasks.turns import set_detector, told_once
from daq.tasks.verdicts import Verdict, worst

BRIGHT, DIM, DARK = "bright", "dim", "dark"
SETTINGS = 11
DWELL_S = {BRIGHT: 5.0, DIM: 10.0, DARK: 5.0}
STEEP = 0.1  # of the rate over the whole dial: more is no plateau
WANDER = 1e-3  # of the rate: what the dial's own wander may make
SEEN = 5.0  # errors: with less light above dark there is none
APART = 3.0  # errors: slopes of much light and of little that lie farther apart differ


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


@dataclass(frozen=True, slots=True)
class _Found:
    """The plateaus of much light and of little, the points they were fitted to, and the dark."""

    at: FloatArray
    logs: dict[str, tuple[FloatArray, FloatArray]]
    plateaus: dict[str, Plateau]
    dark: tuple[FloatArray, FloatArray]

    @property
    def apart(self) -> float:
        """By how many standard errors the slope of much light lies above that of little."""
        bright, dim = self.plateaus[BRIGHT], self.plateaus[DIM]
        return (bright.slope - dim.slope) / sqrt(bright.se**2 + dim.se**2)

    @property
    def begins(self) -> float | None:
        """Where the later of both begins, None where both are there from the lowest setting on."""
        return max((one.begins for one in self.plateaus.values() if one.begins is not None), default=None)

    def choose(self, dial: Dial) -> float:
        """Return the setting that is advised: the lower third of the plateau."""
        start = dial.low if self.begins is None else self.begins
        return start + (dial.high - start) / 3

    def dark_hz(self, setting: float) -> float:
        """Return the dark rate about a setting."""
        return float(np.mean(self.dark[0][np.argsort(np.abs(self.at - setting))[:2]]))


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    dial, found = _dial(setting), _found(setting, taken)
    bright, dim = found.plateaus[BRIGHT], found.plateaus[DIM]
    alike: Verdict = "pass" if abs(found.apart) <= APART else "doubtful"
    return Outcome(
        values=_values(setting, taken, dial, found),
        se={"slope": bright.se, "slope_dim": dim.se},
        verdict=worst(_stands(bright, found.begins, dial), alike),
        sentence=_sentence(dial, found, "with the beam shut" if setting.shutter else "behind shut slits"),
        model="a line over the middle third above the knee",
        panels=_panels(dial, found),
        chi2=bright.chi2 + dim.chi2,
        dof=bright.dof + dim.dof,
    )


def _found(setting: Setting, taken: Sequence[Taken]) -> _Found:
    at, dark = _settings(taken), _rates(setting, taken, DARK)
    logs = {role: _log_light(*_rates(setting, taken, role), dark) for role in (BRIGHT, DIM)}
    number = np.arange(len(at), dtype=float)
    return _Found(at, logs, {role: plateau(at, *log, number) for role, log in logs.items()}, dark)


def _log_light(
    rate_hz: FloatArray, se_hz: FloatArray, dark: tuple[FloatArray, FloatArray]
) -> tuple[FloatArray, FloatArray]:
    """Return the logarithm of rates above the dark ones, and its errors; refuses where there is no light."""
    dark_hz, dark_se_hz = dark
    if not np.max((rate_hz - dark_hz) / np.hypot(se_hz, dark_se_hz)) > SEEN:
        raise hopeless(
            "plateau",
            "no more is counted with light than without, at any setting",
            "See that light falls on the detector, then repeat; set the dial back first",
        )
    light_hz = np.maximum(rate_hz - dark_hz, se_hz)
    return np.log(light_hz), np.sqrt(se_hz**2 + dark_se_hz**2) / light_hz


def _values(setting: Setting, taken: Sequence[Taken], dial: Dial, found: _Found) -> dict[str, Any]:
    return {
        "unit": dial.unit,
        "settings": found.at.tolist(),
        "bright_hz": _rates(setting, taken, BRIGHT)[0].tolist(),
        "dim_hz": _rates(setting, taken, DIM)[0].tolist(),
        "dark_hz": found.dark[0].tolist(),
        "slope": found.plateaus[BRIGHT].slope,
        "slope_dim": found.plateaus[DIM].slope,
        "apart": found.apart,
        "begins": found.begins,
        "choose": found.choose(dial),
        "now": dial.now,
        "counts": float(sum(reading.values[0] for _, reading in taken)),
    }


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
    wanders = abs(found.slope) * dial.wanders > WANDER
    bad = _steep(found, dial) or _slips(begins, dial)
    return "fail" if bad else "doubtful" if wanders else "pass"


def _steep(found: Plateau, dial: Dial) -> bool:
    return abs(found.slope) * (dial.high - dial.low) > STEEP


def _slips(begins: float | None, dial: Dial) -> bool:
    return begins is not None and dial.now < begins


def _sentence(dial: Dial, found: _Found, without: str) -> str:
    bright, begins, unit = found.plateaus[BRIGHT], found.begins, dial.unit
    if _steep(bright, dial):
        return (
            f"No plateau is seen between {dial.low:g} and {dial.high:g} {unit}: the rate goes on rising by "
            f"{_by(dial, bright)}."
        )
    where = f"below {dial.low:g}" if begins is None else f"at {begins:.4g}"
    stands = "on the slope below" if _slips(begins, dial) else "on"
    choose = found.choose(dial)
    dark = f"{found.dark_hz(choose):.3g} a second {without}"
    return (
        f"The plateau begins {where} {unit} and rises by {_by(dial, bright)}, {_alike(dial, found)}; "
        f"{dial.now:g} {unit} stands {stands} it, and {choose:.4g} {unit} (its lower third, {dark}) is "
        f"advised; the program sets none."
    )


def _alike(dial: Dial, found: _Found) -> str:
    if abs(found.apart) <= APART:
        return "as with little light"
    return f"but {_by(dial, found.plateaus[DIM])} with little light: the gain depends on the rate"


def _by(dial: Dial, found: Plateau) -> str:
    many = 100.0 if dial.unit == "V" else 1.0
    unit = f"{many:g} {dial.unit}" if many > 1 else dial.unit
    return f"{100 * many * found.slope:.2f} +- {100 * many * found.se:.2f} % for {unit}"


def _panels(dial: Dial, found: _Found) -> tuple[Panel, ...]:
    at, label = found.at, f"{dial.what} [{dial.unit}]"
    places = np.linspace(at.min(), at.max(), 50)
    marks = {"now": dial.now} | ({} if found.begins is None else {"begins": found.begins})
    least = float(at.min()) if found.begins is None else found.begins
    far, close, above = [], [], places >= least
    for role, (log_rate, se) in found.logs.items():
        one = found.plateaus[role]
        off, line = log_rate - one.level, one.line(places) - one.level
        far.append(Curve(at, np.exp(off), role, np.exp(off) * se))
        close.append(Curve(at[at >= least], 100 * off[at >= least], role, 100 * se[at >= least]))
        close.append(Curve(places[above], 100 * line[above], f"{role}, line", line=True))
    behind = (Curve(at, found.dark[0], DARK, found.dark[1]),)
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
