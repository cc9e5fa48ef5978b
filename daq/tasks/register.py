"""Register: where the openings are, found by the tool itself, which way round, and how far from the edges."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np
from scipy.stats import norm

from daq import openings
from daq.estimate.arrays import FloatArray
from daq.itinerary import expected_rates
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, counts_only
from daq.tasks.drawing import named, seen_windows
from daq.tasks.flanks import clipped
from daq.tasks.panels import Curve, Panel
from daq.tasks.said import of_allowed
from daq.tasks.verdicts import within, worst
from daq.tasks.windows import NAME, Edges, plain, together, window

COARSE, UP, DOWN = "coarse", "up", "down"
COARSE_S, FINE_S = 0.1, 0.2
COARSE_PARTS, FINE_PARTS = 4, 40  # of a window's drawn width: steps of the scans
AROUND = 10  # fine steps on both sides of an edge
TAKE_UP_MM, REPEATS = 0.3, 4.0
KEY = "key"


def drawn_mm(setting: Setting) -> dict[str, float]:
    """Return where the drawing has windows that let light pass, the key among them."""
    mask = setting.rig.mask
    drawn = {name: shown.at_mm for name, shown in mask.openings.items() if name != openings.NONE}
    return drawn if mask.key_mm is None else drawn | {KEY: mask.key_mm}


def _lacks(setting: Setting) -> Sequence[str]:
    missing = (
        ()
        if setting.rig.mask.window_mm
        else ("the rig does not say how wide the windows are drawn (mask.window_mm).",)
    )
    return (*counts_only(setting), *missing)


def _width_mm(setting: Setting) -> float:
    width_mm = setting.rig.mask.window_mm
    assert width_mm is not None  # `lacks` has seen to it
    return width_mm


def _bright(setting: Setting) -> tuple[float, float]:
    """Return where every opening has light, and half of what the darkest has there above the background."""
    places = np.array(setting.measurement.positions.places_mm)
    rates = expected_rates(setting.measurement, setting.rig)
    light = rates[:, 1:].min(axis=1) - rates[:, 0]
    best = int(np.argmax(light))
    return float(places[best]), float(light[best]) / 2


def _asks(setting: Setting, taken: Sequence[Taken]) -> Sequence[Ask]:
    place, _ = _bright(setting)
    if not taken:
        return [Ask(COARSE, COARSE_S, place, place_mm=float(at)) for at in _coarse_mm(setting)]
    if any(ask.role != COARSE for ask, _ in taken):
        return ()
    found = _found(setting, taken)
    step = _width_mm(setting) / FINE_PARTS
    asks: list[Ask] = []
    for name in found:
        at = _fine_mm(found[name], step)
        for role, places, sign in ((UP, at, -1), (DOWN, at[::-1], 1)):
            via = float(np.clip(places[0] + sign * TAKE_UP_MM, *_limits(setting)))
            asks.append(Ask(f"{role} {name}", FINE_S, place, place_mm=float(places[0]), via_mm=via))
            asks += [Ask(f"{role} {name}", FINE_S, place, place_mm=float(one)) for one in places[1:]]
    return [ask for ask in asks if ask.place_mm is not None and _inside(setting, ask.place_mm)]


def _limits(setting: Setting) -> tuple[float, float]:
    return setting.rig.axes[setting.rig.mask.axis].limits_mm


def _inside(setting: Setting, place_mm: float) -> bool:
    low, high = _limits(setting)
    return low <= place_mm <= high


def _coarse_mm(setting: Setting) -> FloatArray:
    low, high = _limits(setting)
    steps = int(np.ceil((high - low) / (_width_mm(setting) / COARSE_PARTS)))
    return np.round(np.linspace(low, high, steps + 1), 4)


def _fine_mm(ends: tuple[float, float], step: float) -> FloatArray:
    around = np.arange(-AROUND, AROUND + 1) * step
    middle = np.linspace(ends[0], ends[1], 5)[1:-1]
    return np.round(np.unique(np.concatenate([ends[0] + around, middle, ends[1] + around])), 4)


def _found(setting: Setting, taken: Sequence[Taken]) -> dict[str, tuple[float, float]]:
    """Return both ends of every drawn window as the coarse scan saw them; refuses what is not the drawing."""
    place, rate = _scan(setting, taken, COARSE)
    least = float(np.quantile(rate, 0.25)) + _bright(setting)[1]
    ends = seen_windows(place, rate, least)
    centres = np.array([(a + b) / 2 for a, b in ends])
    error_mm = (
        _width_mm(setting) / COARSE_PARTS / sqrt(24)
    )  # the mean of two edges, each evenly within a step
    names = named(centres, drawn_mm(setting), error_mm)
    by_centre = {(a + b) / 2: (a, b) for a, b in ends}
    return {name: by_centre[centre] for name, centre in names.items()}


def _scan(setting: Setting, taken: Sequence[Taken], role: str) -> tuple[FloatArray, FloatArray]:
    """Return places and rates, the described dead time taken out, of one scan."""
    rows = [(ask.place_mm, reading.values[0] / reading.live_s) for ask, reading in taken if ask.role == role]
    table = np.array(sorted(rows), float)
    return table[:, 0], setting.true_hz(table[:, 1])


@dataclass(frozen=True, slots=True)
class _Found:
    """Every window as it was fitted in scans up and down, and how far the stage stands off at random."""

    up: dict[str, Edges]
    down: dict[str, Edges]
    chance_mm: float

    @property
    def centre_mm(self) -> dict[str, float]:
        """The middle of each window, of both ways."""
        return {name: (one.centre_mm + self.down[name].centre_mm) / 2 for name, one in self.up.items()}

    @property
    def centre_se_mm(self) -> dict[str, float]:
        """The standard errors of the middles."""
        return {
            name: sqrt(one.centre_se_mm**2 + self.down[name].centre_se_mm ** 2) / 2
            for name, one in self.up.items()
        }

    @property
    def plays_mm(self) -> list[float]:
        """How far apart moves up and down end, window by window."""
        return [self.down[name].centre_mm - one.centre_mm for name, one in self.up.items()]

    @property
    def play_mm(self) -> float:
        """Their mean."""
        return float(np.mean(self.plays_mm))

    @property
    def every(self) -> list[Edges]:
        """All of them."""
        return [*self.up.values(), *self.down.values()]


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    found = _fitted(setting, taken)
    aside_mm = abs(found.play_mm) / 2 + REPEATS * found.chance_mm
    margin_mm = {
        name: _margin_mm(setting, one, found.down[name], aside_mm)
        for name, one in found.up.items()
        if name != KEY
    }
    values = _values(setting, found) | {"margin_mm": margin_mm}
    still = within(found.chance_mm, 0.0, float(np.mean([one.edge_mm for one in found.up.values()])))
    return Outcome(
        values=values,
        se={"centre_mm": found.centre_se_mm, "play_mm": _mean_se(found.plays_mm)},
        verdict=worst("pass" if min(margin_mm.values()) > 0 else "fail", still),
        sentence=_sentence(setting, values),
        model="window with blurred edges, Poisson deviance",
        panels=_panels(setting, taken, found.up),
        chi2=sum(one.chi2 for one in found.every),
        dof=sum(one.dof for one in found.every),
    )


def _fitted(setting: Setting, taken: Sequence[Taken]) -> _Found:
    coarse = _found(setting, taken)
    roles = {f"{role} {name}": name for role in (UP, DOWN) for name in coarse}
    scans = {role: _counts(setting, taken, role) for role in roles}
    starts = {role: _start(scans[role][1], coarse[name]) for role, name in roles.items()}
    found, chance_mm = together(scans, starts)
    up, down = ({name: found[f"{role} {name}"] for name in coarse} for role in (UP, DOWN))
    return _Found(up, down, chance_mm)


def _values(setting: Setting, found: _Found) -> dict[str, Any]:
    return {
        "centre_mm": found.centre_mm,
        "off_drawing_mm": {name: found.centre_mm[name] - at for name, at in drawn_mm(setting).items()},
        "play_mm": found.play_mm,
        "repeat_mm": found.chance_mm,
        "kappa_shift": _shift(setting, found.up, found.play_mm, found.chance_mm),
        "position_mm": _bright(setting)[0],
        "gate_s": FINE_S,
        "up": plain(found.up),
        "down": plain(found.down),
    }


def _sentence(setting: Setting, values: Mapping[str, Any]) -> str:
    margin_mm, off_mm = values["margin_mm"], list(values["off_drawing_mm"].values())
    tight = min(margin_mm, key=lambda name: float(margin_mm[name]))
    return (
        f"{len(values['centre_mm'])} windows are as drawn, {1e3 * float(np.mean(off_mm)):+.1f} um off "
        f"altogether; the tightest margin is {1e3 * margin_mm[tight]:.0f} um ({tight}), so clipping moves "
        f"kappa by {of_allowed(values['kappa_shift'], setting.yardstick.allowed)}; moves up and down end "
        f"{1e3 * values['play_mm']:.1f} um apart, and {1e3 * values['repeat_mm']:.1f} um at random."
    )


def _mean_se(values: list[float]) -> float:
    return float(np.std(values, ddof=1) / sqrt(len(values)))


def _counts(setting: Setting, taken: Sequence[Taken], role: str) -> tuple[FloatArray, FloatArray]:
    place, rate = _scan(setting, taken, role)
    return place, rate * FINE_S


def _start(counts: FloatArray, ends: tuple[float, float]) -> FloatArray:
    """Return where the fit of a window begins."""
    return np.array([counts.min(), np.ptp(counts), *ends, 0.05 * (ends[1] - ends[0])])


def _margin_mm(setting: Setting, up: Edges, down: Edges, aside_mm: float) -> float:
    """Return how far a window may still stand aside before it loses what the yardstick allows [mm]."""
    width = (up.width_mm + down.width_mm) / 2
    edge = (up.edge_mm + down.edge_mm) / 2
    return width / 2 - aside_mm - float(norm.isf(setting.yardstick.rate_error)) * edge


def _shift(setting: Setting, edges: dict[str, Edges], play_mm: float, chance_mm: float) -> float:
    """Return what clipping does to kappa when every opening is shown at its middle."""
    lost = {
        name: clipped(abs(play_mm) / 2, one.width_mm, one.edge_mm, chance_mm)
        for name, one in edges.items()
        if name != KEY
    }
    return abs(sum(setting.yardstick.load[openings.mask(name)] * -share for name, share in lost.items()))


def _panels(setting: Setting, taken: Sequence[Taken], up: dict[str, Edges]) -> tuple[Panel, ...]:
    place, rate = _scan(setting, taken, COARSE)
    marks = {name: one.centre_mm for name, one in up.items()}
    fine = [_scan(setting, taken, f"{UP} {name}") for name in up]
    finer = [np.linspace(one[0].min(), one[0].max(), 400) for one in fine]
    lines = [window(at, edges.values) / FINE_S for at, edges in zip(finer, up.values(), strict=True)]
    seen = np.concatenate([one[0] for one in fine]), np.concatenate([one[1] for one in fine])
    return (
        Panel("The whole travel", "mask [mm]", "counts a second", (Curve(place, rate, "scan"),), marks),
        Panel(
            "Every window, upwards",
            "mask [mm]",
            "counts a second",
            (
                Curve(*seen, "scan"),
                Curve(np.concatenate(finer), np.concatenate(lines), "fit", line=True),
            ),
        ),
    )


TASK = Task(
    name=NAME,
    purpose="Where the openings are, which way round the chip is, and the margin to the edges.",
    days=7,
    holds_for=("chip", "axes"),
    lacks=_lacks,
    asks=_asks,
    fit=_fit,
)
