"""Scale: the fringe period and the middle of the pattern on the detector's own axis."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np

from daq import openings
from daq.estimate.arrays import FloatArray
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, once
from daq.tasks.fringes import NAME, SECTIONS, Fringes, fringes
from daq.tasks.panels import Curve, Panel
from daq.tasks.said import with_error
from daq.tasks.verdicts import Verdict, fits, worst

DWELL_S, PER_FRINGE = 0.5, 8  # points of the finest fringe
FINEST_REL = 1e-3  # standard error of the period that is enough
PAIRS = ("AB", "BC", "AC")


def _expected_mm(setting: Setting, pair: str) -> float:
    geometry, slits = setting.rig.geometry, setting.rig.slits_of(openings.mask(pair))
    one, other = (slits[letter].centre_m for letter in pair)
    return 1e3 * geometry.wavelength_m * geometry.distance_m / abs(other - one)


def _pairs(setting: Setting) -> list[str]:
    return [pair for pair in PAIRS if pair in setting.rig.mask.openings]


def _visits(setting: Setting) -> Sequence[Ask]:
    places = setting.measurement.positions.places_mm
    low, high = setting.rig.axes[setting.rig.detector.axis].limits_mm
    first, last = min(places), max(places)
    finest = min(_expected_mm(setting, pair) for pair in _pairs(setting))
    number = int(np.ceil((last - first) / finest * PER_FRINGE)) + 1
    scan = np.round(np.clip(np.linspace(first, last, number), low, high), 4)
    shown = ("none", "A", "B", "C", *_pairs(setting))
    order = [*shown, *shown[::-1]]  # and back: a straight drift cancels
    return [
        Ask(name, DWELL_S, float(place), openings.mask(name), beam=setting.open_beam)
        for place in scan
        for name in order
        if name in setting.rig.mask.openings
    ]


def _lobe_mm(setting: Setting) -> float:
    """Return how wide the pattern of the widest slit is, from zero to zero over two [mm]."""
    geometry, slits = setting.rig.geometry, setting.rig.slits.values()
    return 1e3 * geometry.wavelength_m * geometry.distance_m / max(slit.width_m for slit in slits)


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    place, counts = _counts(setting, taken)
    expected = {pair: _expected_mm(setting, pair) for pair in _pairs(setting)}
    found = fringes(place, counts, expected, _lobe_mm(setting))
    common = _common(found, list(expected.values()))
    values, se = _values(found, common, setting.rig.geometry.distance_m)
    precise: Verdict = "pass" if common.se <= FINEST_REL else "fail"
    return Outcome(
        values=values,
        se=se,
        verdict=worst(
            fits(common.chi2, len(expected) - 1), fits(found.chi2, found.dof), _even(found), precise
        ),
        sentence=_sentence(common, found),
        model="every slit alone, and a fringe between two",
        panels=(_panel(place, counts, found),),
        chi2=found.chi2,
        dof=found.dof,
    )


def _even(found: Fringes) -> Verdict:
    """Return "doubtful" where sections of the range are shifted against one another."""
    # the middle and the period of the fit have taken two of them
    return fits(float(np.sum((found.bent_mm / found.bent_se_mm) ** 2)), SECTIONS - 2)


def _values(found: Fringes, common: Common, distance_m: float) -> tuple[dict[str, Any], dict[str, Any]]:
    each = found.by_pair
    values = {
        "scale": common.scale,
        "period_mm": {pair: one.period_mm for pair, one in each.items()},
        "middle_mm": {pair: one.middle_mm for pair, one in each.items()},
        "visibility": {pair: one.visibility for pair, one in each.items()},
        "distance_m": common.scale * distance_m,
        "bent_mm": found.bent_mm.tolist(),
    }
    se = {
        "scale": common.se,
        "period_mm": {pair: one.period_se_mm for pair, one in each.items()},
        "middle_mm": {pair: one.middle_se_mm for pair, one in each.items()},
        "distance_m": common.se * distance_m,
        "bent_mm": found.bent_se_mm.tolist(),
    }
    return values, se


@dataclass(frozen=True, slots=True)
class Common:
    """By how much all fringes are wider than described, its standard error, and how far they differ."""

    scale: float
    se: float
    chi2: float


def _common(found: Fringes, expected_mm: Sequence[float]) -> Common:
    """Return the scale that all fringes share, by least squares with the covariance of their periods."""
    expected = np.array(expected_mm)
    scale = np.array([one.period_mm for one in found.by_pair.values()]) / expected
    inverse = np.linalg.inv(found.period_covariance / np.outer(expected, expected))
    weight = inverse.sum(axis=0)
    mean = float(weight @ scale / weight.sum())
    return Common(mean, 1 / sqrt(float(weight.sum())), float((scale - mean) @ inverse @ (scale - mean)))


def _sentence(common: Common, found: Fringes) -> str:
    finest = min(found.by_pair, key=lambda pair: found.by_pair[pair].period_mm)
    one = found.by_pair[finest]
    largest_um = 1e3 * float(np.abs(found.bent_mm).max())
    bent = (
        ""
        if _even(found) == "pass"
        else f" The scale is not even over the range: sections are shifted by up to {largest_um:.1f} um."
    )
    apart = (
        ""
        if fits(common.chi2, len(found.by_pair) - 1) == "pass"
        else " Fringes of the pairs do not agree: look at the pitch of the slits and the scale of the stage."
    )
    return (
        f"Fringes are {with_error(common.scale, common.se)} times as wide as described ({finest}: "
        f"{with_error(one.period_mm, one.period_se_mm)} mm), their middle is at "
        f"{with_error(one.middle_mm, one.middle_se_mm)} mm; a scale that all share does nothing to kappa."
        f"{apart}{bent}"
    )


def _counts(setting: Setting, taken: Sequence[Taken]) -> tuple[FloatArray, dict[str, FloatArray]]:
    """Return places and the counts of each opening there, the described dead time taken out."""
    place = np.unique([ask.position_mm for ask, _ in taken])
    counts: dict[str, FloatArray] = {}
    live: dict[str, FloatArray] = {}
    for ask, reading in taken:
        at = int(np.searchsorted(place, ask.position_mm))
        counts.setdefault(ask.role, np.zeros(len(place)))[at] += reading.values[0]
        live.setdefault(ask.role, np.zeros(len(place)))[at] += reading.live_s
    return place, {name: setting.true_hz(counts[name] / live[name]) * live[name] for name in counts}


def _panel(place: FloatArray, counts: dict[str, FloatArray], found: Fringes) -> Panel:
    curves = []
    for pair in found.by_pair:
        curves += [Curve(place, counts[pair], pair)]
        curves += [Curve(place, found.fitted[pair], f"{pair}, fit", line=True)]
    return Panel("Fringes of pairs", "detector [mm]", "counts", tuple(curves))


TASK = Task(
    name=NAME,
    purpose="The fringe period and the middle of the pattern on the detector's own axis.",
    days=30,
    holds_for=("axes", "geometry"),
    asks=once(_visits),
    fit=_fit,
)
