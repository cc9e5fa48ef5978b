"""Bench: the plan of a Lantern night, and the counts of many such nights, drawn by visit."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from daq.estimate import Plan
from daq.estimate.arrays import FloatArray
from daq.estimate.irregular import series_of
from daq.estimate.joint import Fit, standard_error
from daq.estimate.residual import weighted_kappa
from daq.estimate.sensitivity import log_gradient, taken_visits
from daq.estimate.tables import plan_contrast
from daq.estimate.visits import Visits, no_visits
from daq.itinerary import compose, plan_of
from tests.examples import lantern, lantern_rig
from tests.studies.sources import HOUR_S, SOURCES, WALK_PER_HOUR

SEED = 20261201  # of every study; never searched


@dataclass(frozen=True, slots=True)
class Night:
    """A planned night without dead time: plan, expected rates (J, K), times and live time by visit."""

    plan: Plan
    rates_hz: FloatArray
    time_s: FloatArray
    dwell_s: FloatArray

    @property
    def expected(self) -> FloatArray:
        """What every visit counts from a steady source."""
        return self.rates_hz[self.plan.position, self.plan.opening] * self.dwell_s

    @property
    def counting_se(self) -> float:
        """The standard error of kappa from counting alone at full strength."""
        live = np.zeros_like(self.rates_hz)
        np.add.at(live, (self.plan.position, self.plan.opening), self.dwell_s)
        what, signs = plan_contrast(self.plan)
        return weighted_kappa(
            self.rates_hz, self.rates_hz / live, self.plan.weights, what, signs, self.plan.normalisation
        )[1]


def night(**changes: Any) -> Night:
    """Return the Lantern night with changes of its description."""
    measurement = lantern(estimate__dead_time_s=0.0, estimate__dead_time_u_s=0.0, **changes)
    itinerary = compose(measurement, lantern_rig())
    middle_s = itinerary.start_s + itinerary.dwell_s / 2
    return Night(plan_of(itinerary, measurement), itinerary.rates_hz, middle_s, itinerary.dwell_s)


def reduced(**changes: Any) -> Night:
    """Return a night of 11 positions and 36 laps, 3168 visits."""
    return night(positions__number=11, itinerary__laps=36, **changes)


def shuffled(of: Night, generator: np.random.Generator) -> Night:
    """Return a night whose stands show their openings in random order."""
    stands, each = len(of.plan.stand) // of.plan.whole_stand, of.plan.whole_stand
    order = np.concatenate([stand * each + generator.permutation(each) for stand in range(stands)])
    return replace(of, plan=replace(of.plan, opening=of.plan.opening[order]))


def generator_of(study: str, source: str) -> np.random.Generator:
    """Return the generator of one study and source, the same for ever."""
    words = [SEED, *study.encode(), *source.encode()]
    return np.random.Generator(np.random.PCG64DXSM(np.random.SeedSequence(words)))


def visits_of_counts(of: Night, counts: FloatArray) -> Visits:
    """Return a complete night as visits."""
    visits = no_visits(of.plan)
    visits.value[:] = visits.variance[:] = counts
    visits.live[:], visits.middle_s[:] = of.dwell_s, of.time_s
    for flag in (visits.good, visits.used, visits.done, visits.countable):
        flag[:] = True
    return visits


def strengths(
    of: Night, source: str, nights: int, generator: np.random.Generator, at_once: int = 100
) -> Iterator[FloatArray]:
    """Yield the strength of a source by night and visit, some nights at once."""
    for first in range(0, nights, at_once):
        yield SOURCES[source](of.time_s, min(at_once, nights - first), generator)


def least_se(of: Night, source: str, strength: FloatArray) -> float:
    """Return the least possible standard error of kappa (hybrid Cramer-Rao bound) at a strength (V)."""
    visits = visits_of_counts(of, of.expected * strength)
    taken = taken_visits(visits, of.plan, visits.good)
    assert taken is not None
    series = series_of(visits, of.plan, taken)
    per_s = WALK_PER_HOUR.get(source, 1e-12) / HOUR_S
    gradient = log_gradient(of.rates_hz, np.ones(len(of.rates_hz), bool), of.plan)
    assert gradient is not None
    known = Fit(of.rates_hz.ravel(), np.log(strength), per_s, 0)
    return standard_error(series, known, gradient.ravel())
