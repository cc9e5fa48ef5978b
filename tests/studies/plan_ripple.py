"""Ripples that fit the rhythm of a plan: how often null nights are rejected, with its measures and without.

Without them: no coin, no pause, the dwell as it was given. With them: what `compose` does when it is told of
the line. A night is rejected when zero lies outside its t bar. Every night draws its own coins and pauses.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import repeat
from typing import Any

import numpy as np
from scipy.special import stdtrit

from daq.description import Measurement
from daq.estimate.arrays import FloatArray
from daq.estimate.plan import Plan
from daq.estimate.tables import kappa_of, over
from daq.itinerary import Itinerary, compose, plan_of
from daq.itinerary.compose import laid_out
from daq.itinerary.decide import decide, rhythm
from daq.itinerary.design import lay_out
from daq.itinerary.known import known_of
from daq.itinerary.moves import start_times_s
from tests.examples import lantern, lantern_rig
from tests.studies.bench import generator_of
from tests.studies.rows import Each, rows

NIGHTS = 2000
AMPLITUDE = 0.05
PAIRS, POSITIONS, DWELL_S = 20, 11, 8.8
CYCLES = {"pair": 1, "pair/2": 2, "pair/3": 3, "stand": 2 * POSITIONS, "two stands": POSITIONS}
RIG = lantern_rig()


@dataclass(frozen=True, slots=True)
class Timed:
    """A plan with the expected rates (J, K) and the times of its visits."""

    plan: Plan
    rates_hz: FloatArray
    start_s: FloatArray
    dwell_s: FloatArray


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return how often null nights are rejected, by ripple, with and without measures."""
    wanted: dict[str, list[Any]] = {name: [name, nights] for name in CYCLES}
    wanted["pair/2, by pauses"] = ["pair/2", nights, 1.0]
    return {
        "about": f"Lantern, {POSITIONS} positions, {PAIRS} pairs, dwell {DWELL_S:g} s, "
        f"ripple of {100 * AMPLITUDE:g} % and random phase; share of null nights rejected at 5 %",
        "rows": each("plan_ripple:row", wanted),
    }


def row(name: str, nights: int, unknown: float = 0.0) -> dict[str, Any]:
    """Return the figures of a line whose period is not known to a share of it."""
    plain = _measurement()
    along = compose(plain, RIG).design
    assert along is not None
    period_s = rhythm(known_of(plain, RIG), along).pair_s / CYCLES[name]
    told = _measurement({"period_s": period_s, "period_u_s": unknown * period_s, "amplitude": AMPLITUDE})
    generator = generator_of("plan ripple", f"{name} {unknown}")
    without = _rejected(repeat(_heads(plain), nights), period_s, generator)
    known = known_of(told, RIG)
    decision = decide(known, along.slots, 0)
    seeds = generator.integers(0, 2**40, nights).tolist()
    drawn = (_drawn(laid_out(known, decision, seed), told) for seed in seeds)
    measured = _rejected(drawn, period_s, generator)
    return {
        "nights": nights,
        "period_s": period_s,
        "without": without,
        "with": measured,
        "with_se": (measured * (1 - measured) / nights) ** 0.5,
        "notes": list(decision.notes),
        "meets": {"with": measured <= 0.065, "several times": without >= 2 * measured},
    }


def _measurement(*lines: dict[str, float]) -> Measurement:
    return lantern(
        positions__number=POSITIONS,
        itinerary__laps=2 * PAIRS,
        itinerary__dwell_s=DWELL_S,
        estimate__dead_time_s=0.0,
        estimate__dead_time_u_s=0.0,
        expect__level_by_hour=[1.0],
        expect__lines=list(lines),
    )


def _drawn(itinerary: Itinerary, measurement: Measurement) -> Timed:
    return Timed(plan_of(itinerary, measurement), itinerary.rates_hz, itinerary.start_s, itinerary.dwell_s)


def _heads(measurement: Measurement) -> Timed:
    """Return the plan as if every coin had fallen on heads."""
    known, itinerary = known_of(measurement, RIG), compose(measurement, RIG)
    assert itinerary.design is not None
    heads = np.ones(PAIRS, bool)
    order = lay_out(known, itinerary.design, 2 * PAIRS, heads, np.random.default_rng(0))
    start_s = start_times_s(itinerary.dwell_s, known.moves.between_s(order, known.places_mm))
    plan = replace(plan_of(itinerary, measurement), opening=order.opening, position=order.position)
    return Timed(plan, itinerary.rates_hz, start_s, itinerary.dwell_s)


def _rejected(nights: Iterator[Timed], period_s: float, generator: np.random.Generator) -> float:
    """Return the share of null nights in which zero lies outside the t bar."""
    return float(np.mean([_rejects(night, period_s, generator) for night in nights]))


def _rejects(night: Timed, period_s: float, generator: np.random.Generator) -> bool:
    plan, middle_s = night.plan, night.start_s + night.dwell_s / 2
    phase = 2 * np.pi * (middle_s / period_s + generator.random())
    level = 1 + AMPLITUDE * np.sinc(night.dwell_s / period_s) * np.sin(phase)
    counts = generator.poisson(night.rates_hz[plan.position, plan.opening] * night.dwell_s * level)
    value, live = cells(counts.astype(float), plan), cells(night.dwell_s, plan)
    kappa = _kappas(value.sum(axis=0)[None], live.sum(axis=0)[None], plan)[0]
    parts = _kappas(value.sum(axis=0) - value, live.sum(axis=0) - live, plan)
    pairs = len(parts)
    se = np.sqrt((pairs - 1) / pairs * np.sum((parts - parts.mean()) ** 2))
    return bool(abs(kappa) > stdtrit(pairs - 1, 0.975) * se)


def cells(column: FloatArray, plan: Plan) -> FloatArray:
    """Return sums by pair, position and opening."""
    shape = (plan.planned_pairs, len(plan.positions_mm), len(plan.openings))
    cell = (plan.pair * shape[1] + plan.position) * shape[2] + plan.opening
    return np.asarray(np.bincount(cell, column, int(np.prod(shape))).reshape(shape))


def _kappas(value: FloatArray, live: FloatArray, plan: Plan) -> FloatArray:
    return kappa_of(over(value, live), np.ones(len(plan.positions_mm), bool), plan)
