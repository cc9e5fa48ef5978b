"""Pilot: the source watched for twenty minutes, and the dwell that suits how it wanders."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from math import sqrt

import numpy as np

from daq.description import Measurement
from daq.description.measurement import Pilot
from daq.estimate.arrays import FloatArray
from daq.estimate.drift import structure_function
from daq.itinerary import Forecast, compose, forecast
from daq.itinerary.pilot import HOUR_S, wander_of_counts
from daq.itinerary.wander import Wander
from daq.tasks.contract import Ask, Outcome, Setting, Taken, Task, once
from daq.tasks.panels import Curve, Panel
from daq.tasks.refusals import hopeless
from daq.tasks.verdicts import within

SAMPLE_S, WATCH_S, LOOK_S = 1.0, 1200.0, 100.0
LEAST = 25  # counts of a sample: below it the logarithm is no longer even
DRIFT_SHARE = 0.2  # of the counting variance: more of it asks for advice


def with_pilot(measurement: Measurement, counts: Sequence[int], sample_s: float) -> Measurement:
    """Return a measurement whose plan rests on what a pilot saw."""
    return measurement.model_copy(update={"pilot": Pilot(sample_s=sample_s, counts=tuple(counts))})


def _visits(setting: Setting) -> Sequence[Ask]:
    place, opening = setting.yardstick.position_mm, setting.yardstick.opening
    return [Ask("watch", SAMPLE_S, place, opening, beam=setting.open_beam)] * round(WATCH_S / SAMPLE_S)


def _fit(setting: Setting, taken: Sequence[Taken]) -> Outcome:
    counts = np.array([reading.values[0] for _, reading in taken], float)
    opened_s = np.array([reading.gate_open_ns for _, reading in taken]) / 1e9
    sample_s = float(np.median(np.diff(opened_s)))
    _refuse_few(counts)
    wander, ripples = wander_of_counts(counts, sample_s)
    plans = _plans(setting, counts, sample_s)
    return Outcome(
        values={
            "counts": counts.astype(int).tolist(),
            "sample_s": sample_s,
            "wander_100_s": float(np.sqrt(wander.structure(np.array([LOOK_S]))[0])),
            **plans.values,
            "lines_s": [ripple.period_s for ripple in ripples],
        },
        se={"lines_s": [ripple.period_u_s for ripple in ripples]},
        verdict=within(plans.drift_share, 0.0, DRIFT_SHARE),
        sentence=plans.sentence,
        model="random walk and relaxing parts, by the spectrum of the log rate",
        panels=_panels(opened_s, counts, sample_s, wander),
    )


def _refuse_few(counts: FloatArray) -> None:
    if counts.min() < LEAST:
        raise hopeless(
            "pilot",
            f"a sample counted {counts.min():.0f} only; what the source does drowns in counting",
            "See that light falls on the detector, or watch a brighter place, then repeat",
        )


@dataclass(frozen=True, slots=True)
class _Plans:
    """The night with the best dwell and the night as it is planned: dwell and forecast of each."""

    best_s: float
    best: Forecast
    planned_s: float
    planned: Forecast

    @property
    def drift_share(self) -> float:
        """The variance that drift adds over that of counting, as planned."""
        return float((self.planned.budget["drift"] / self.planned.budget["counting"]) ** 2)

    @property
    def values(self) -> dict[str, float]:
        """What stands in the record."""
        return {
            "best_dwell_s": self.best_s,
            "dwell_s": self.planned_s,
            "q_at_best": self.best.q,
            "q": self.planned.q,
            "drift_share": self.drift_share,
            "kappa_se": self.planned.kappa_se,
        }

    @property
    def sentence(self) -> str:
        """What a person is told."""
        goal = "no goal is set" if self.planned.goal_se is None else _goal(self.planned.goal_s)
        return (
            f"The best dwell is {self.best_s:.1f} s ({self.planned_s:.1f} s planned); drift adds "
            f"{100 * (sqrt(1 + self.drift_share) - 1):.1f} % to the error bar, "
            f"{self.planned.kappa_se:.2e} at the end; {goal}."
        )


def _plans(setting: Setting, counts: FloatArray, sample_s: float) -> _Plans:
    """Return what the planner makes of a source as it was watched, with the dwell free and as described."""
    watched = with_pilot(setting.measurement, counts.astype(int).tolist(), sample_s)
    free = watched.model_copy(update={"itinerary": watched.itinerary.model_copy(update={"dwell_s": None})})
    best, planned = compose(free, setting.rig), compose(watched, setting.rig)
    return _Plans(
        best_s=float(np.mean(best.dwell_s)),
        best=forecast(best, watched),
        planned_s=float(np.mean(planned.dwell_s)),
        planned=forecast(planned, watched),
    )


def _goal(goal_s: float | None) -> str:
    return (
        "the goal is out of reach" if goal_s is None else f"the goal is reached after {goal_s / HOUR_S:.1f} h"
    )


def _panels(opened_s: FloatArray, counts: FloatArray, sample_s: float, wander: Wander) -> tuple[Panel, ...]:
    minutes = (opened_s - opened_s[0]) / 60
    lags_s = np.unique(np.geomspace(1, len(counts) // 5, 20).round()) * sample_s
    times_s = sample_s * np.arange(len(counts))
    seen = structure_function(np.log(counts), times_s, lags_s, 1 / counts)
    return (
        Panel("The source, watched", "minutes", "counts a sample", (Curve(minutes, counts, "samples"),)),
        Panel(
            "How far it wanders in a time",
            "lag [s]",
            "structure function of the log rate",
            (Curve(lags_s, seen, "seen"), Curve(lags_s, wander.structure(lags_s), "model", line=True)),
        ),
    )


TASK = Task(
    name="pilot",
    purpose="How the source wanders, and the dwell that suits it.",
    days=1,
    holds_for=("devices",),
    asks=once(_visits),
    fit=_fit,
)
