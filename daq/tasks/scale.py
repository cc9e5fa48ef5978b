"""Scale: the fringe period and the middle of the pattern on the detector's own axis."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt

import numpy as np
from scipy.optimize import least_squares

from daq import openings
from daq.estimate.arrays import FloatArray
from daq.estimate.counting import true_rate_hz
from daq.tasks.contract import (
    Ask,
    Curve,
    Outcome,
    Panel,
    Setting,
    Taken,
    Task,
    counts_only,
    fits,
    hopeless,
    worst,
)

NAME = "scale"
DWELL_S, PER_FRINGE = 0.5, 8  # points of the finest fringe
FINEST_REL = 1e-3  # standard error of the period that is enough
PAIRS = ("AB", "BC", "AC")


@dataclass(frozen=True, slots=True)
class Fringe:
    """A fringe as it was fitted: period and middle [mm], visibility, their covariance, and how well."""

    period_mm: float
    middle_mm: float
    visibility: float
    covariance: FloatArray
    chi2: float
    dof: int

    @property
    def period_se_mm(self) -> float:
        """The standard error of the period."""
        return float(np.sqrt(self.covariance[0, 0]))

    @property
    def middle_se_mm(self) -> float:
        """The standard error of the middle."""
        return float(np.sqrt(self.covariance[1, 1]))


def fringe(
    place_mm: FloatArray,
    counts: FloatArray,
    singles: tuple[FloatArray, FloatArray],
    none: FloatArray,
    period_mm: float,
) -> Fringe:
    """Return the fringe of a pair whose slits were counted alone at the same places.

    Notes
    -----
    n = none + scale (a + b + 2 V sqrt(a b) cos(2 pi (y - y0)/L)), a and b the singles above none, with the
    scale free for the drift between the scans; least squares of (n - fit)/sqrt(variance), the variance that
    of the pair and of the singles in the envelope.

    Raises
    ------
    DaqError
        When the fit does not converge.
    """
    a, b = (np.clip(one - none, 0.0, None) for one in singles)
    width = np.sqrt(np.maximum(counts + singles[0] + singles[1] + none, 1.0))

    def model(at: FloatArray) -> FloatArray:
        period, middle, visibility, scale = at
        wave = np.cos(2 * np.pi * (place_mm - middle) / period)
        return np.asarray(none + scale * (a + b + 2 * visibility * np.sqrt(a * b) * wave))

    found = least_squares(
        lambda at: (counts - model(at)) / width,
        np.array([period_mm, _start_mm(place_mm, counts, a + b + none, period_mm), 0.9, 1.0]),
        x_scale=(1e-2, 1e-2, 1e-2, 1e-3),
        method="lm",
        max_nfev=400,
    )
    period, middle, visibility, _ = found.x
    if not found.success or not 0.5 * period_mm < period < 2 * period_mm or not 0.02 < abs(visibility) < 2:
        raise hopeless(
            NAME,
            f"no fringe of about {period_mm:.2f} mm is seen: the fit does not converge",
            "Look at the picture, at the geometry in the rig file, and at the light of both slits",
        )
    middle -= period * round(middle / period)
    return Fringe(
        float(period),
        float(middle),
        float(visibility),
        np.linalg.inv(found.jac.T @ found.jac),
        2 * float(found.cost),
        len(counts) - 4,
    )


def _start_mm(place_mm: FloatArray, counts: FloatArray, envelope: FloatArray, period_mm: float) -> float:
    """Return the middle from the phase of the leftover at the expected period [mm]."""
    turn = np.exp(2j * np.pi * place_mm / period_mm)
    return float(np.angle(np.sum((counts - envelope) * turn)) / (2 * np.pi) * period_mm)


def _expected_mm(setting: Setting, pair: str) -> float:
    geometry, slits = setting.rig.geometry, setting.rig.slits_of(openings.mask(pair))
    one, other = (slits[letter].centre_m for letter in pair)
    return 1e3 * geometry.wavelength_m * geometry.distance_m / abs(other - one)


def _pairs(setting: Setting) -> list[str]:
    return [pair for pair in PAIRS if pair in setting.rig.mask.openings]


def _asks(setting: Setting, taken: Sequence[Taken]) -> Sequence[Ask]:
    if taken:
        return ()
    places = setting.measurement.positions.places_mm
    low, high = setting.rig.axes[setting.rig.detector.axis].limits_mm
    first, last = min(places), max(places)
    finest = min(_expected_mm(setting, pair) for pair in _pairs(setting))
    number = int(np.ceil((last - first) / finest * PER_FRINGE)) + 1
    scan = np.round(np.clip(np.linspace(first, last, number), low, high), 4)
    shown = ("none", "A", "B", "C", *_pairs(setting))
    order = [*shown, *shown[::-1]]  # and back: a straight drift cancels
    return [
        Ask(name, DWELL_S, float(place), openings.mask(name), beam="open" if setting.shutter else "")
        for place in scan
        for name in order
        if name in setting.rig.mask.openings
    ]


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    place, counts = _counts(setting, taken)
    found = {
        pair: fringe(
            place,
            counts[pair],
            (counts[pair[0]], counts[pair[1]]),
            counts["none"],
            _expected_mm(setting, pair),
        )
        for pair in _pairs(setting)
    }
    expected = {pair: _expected_mm(setting, pair) for pair in found}
    scale = {pair: one.period_mm / expected[pair] for pair, one in found.items()}
    scale_se = {pair: one.period_se_mm / expected[pair] for pair, one in found.items()}
    weight = {pair: 1 / scale_se[pair] ** 2 for pair in found}
    mean = sum(scale[pair] * weight[pair] for pair in found) / sum(weight.values())
    mean_se = 1 / sqrt(sum(weight.values()))
    apart = sum(((scale[pair] - mean) / scale_se[pair]) ** 2 for pair in found)
    chi2, dof = sum(one.chi2 for one in found.values()), sum(one.dof for one in found.values())
    finest = min(found, key=lambda pair: found[pair].period_mm)
    verdict = worst(fits(apart, len(found) - 1), fits(chi2, dof), "pass" if mean_se <= FINEST_REL else "fail")
    return Outcome(
        values={
            "scale": mean,
            "period_mm": {pair: one.period_mm for pair, one in found.items()},
            "middle_mm": {pair: one.middle_mm for pair, one in found.items()},
            "visibility": {pair: one.visibility for pair, one in found.items()},
            "distance_m": mean * setting.rig.geometry.distance_m,
        },
        se={
            "scale": mean_se,
            "period_mm": {pair: one.period_se_mm for pair, one in found.items()},
            "middle_mm": {pair: one.middle_se_mm for pair, one in found.items()},
            "distance_m": mean_se * setting.rig.geometry.distance_m,
        },
        verdict=verdict,
        sentence=(
            f"Fringes are {mean:.5f} +- {mean_se:.5f} times as wide as described ({finest}: "
            f"{found[finest].period_mm:.4f} mm), their middle is at {found[finest].middle_mm:+.4f} mm; "
            f"a scale that all share does nothing to kappa."
        ),
        model="both slits alone, and a fringe between them",
        panels=(_panel(place, counts, found),),
        chi2=chi2,
        dof=dof,
    )


def _counts(setting: Setting, taken: Sequence[Taken]) -> tuple[FloatArray, dict[str, FloatArray]]:
    """Return places and the counts of each opening there, the described dead time taken out."""
    known = setting.measurement.estimate
    place = np.unique([ask.position_mm for ask, _ in taken])
    counts: dict[str, FloatArray] = {}
    live: dict[str, FloatArray] = {}
    for ask, reading in taken:
        at = int(np.searchsorted(place, ask.position_mm))
        counts.setdefault(ask.role, np.zeros(len(place)))[at] += reading.values[0]
        live.setdefault(ask.role, np.zeros(len(place)))[at] += reading.live_s
    return place, {
        name: true_rate_hz(counts[name] / live[name], known.dead_time_s, known.dead_time_kind) * live[name]
        for name in counts
    }


def _panel(place: FloatArray, counts: dict[str, FloatArray], found: dict[str, Fringe]) -> Panel:
    curves = []
    for pair, one in found.items():
        a, b = (np.clip(counts[letter] - counts["none"], 0, None) for letter in pair)
        wave = np.cos(2 * np.pi * (place - one.middle_mm) / one.period_mm)
        fit = counts["none"] + a + b + 2 * one.visibility * np.sqrt(a * b) * wave
        curves += [Curve(place, counts[pair], pair), Curve(place, fit, f"{pair}, fit", line=True)]
    return Panel("Fringes of pairs", "detector [mm]", "counts", tuple(curves))


TASK = Task(
    name=NAME,
    purpose="The fringe period and the middle of the pattern on the detector's own axis.",
    days=30,
    holds_for=("axes", "geometry"),
    lacks=counts_only,
    asks=_asks,
    fit=_fit,
)
