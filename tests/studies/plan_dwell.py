"""The dwell that a pilot of twenty minutes chooses: how much more time it takes than the best one."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np

from daq.itinerary import Wander, compose, walk
from daq.itinerary.choice import best_dwell_s, pair_cost
from daq.itinerary.design import Design
from daq.itinerary.known import Known, known_of
from tests.daq.itinerary.rigs import without_dwell
from tests.examples import lantern_rig
from tests.studies.bench import generator_of
from tests.studies.rows import Each, rows

PILOTS, SECONDS, RATE_HZ = 40, 1200, 1e5
MASKS = {"0.1 s + 0.05 s": (0.1, 40.0), "0.5 s + 0.2 s": (0.5, 10.0), "3 s + 0.5 s": (3.0, 4.0)}
RELAX_S = np.geomspace(1.0, 1e4, 10)


def _flicker(sd: float) -> Wander:
    return Wander(relaxing=tuple((sd**2, float(time_s)) for time_s in RELAX_S))


WANDERS = {
    "walk 0.3 %": walk(0.003),
    "walk 1 %": walk(0.01),
    "walk 3 %": walk(0.03),
    "flicker 0.05 %": _flicker(0.0005),
    "flicker 0.15 %": _flicker(0.0015),
    "walk 1 % and a ripple of 1 % in 20 min": replace(walk(0.01), lines=((0.01, 1200.0),)),
}


def study(nights: int = PILOTS, each: Each = rows) -> dict[str, Any]:
    """Return the loss in Q by source and mask over so many pilots, and over all of them."""
    wanted = {f"{source}, mask {mask}": [source, mask, nights] for source in WANDERS for mask in MASKS}
    losses = {name: np.array(loss) for name, loss in each("plan_dwell:losses", wanted).items()}
    table = {name: _figures(loss) for name, loss in losses.items()}
    every = _figures(np.concatenate(list(losses.values())))
    every["meets"] = {"median": every["median"] <= 0.02, "ninety": every["ninety"] <= 0.05}
    return {
        "about": f"Lantern, {SECONDS} samples of 1 s at {RATE_HZ:g}/s; "
        "Q at the chosen dwell over the least Q, less 1",
        "rows": table | {"all": every},
    }


def losses(source: str, mask: str, nights: int) -> list[float]:
    """Return the loss in Q by pilot."""
    settle_s, speed_mm_s = MASKS[mask]
    rig = lantern_rig(axes__mask__settle_s=settle_s, axes__mask__speed_mm_s=speed_mm_s)
    wander = WANDERS[source]
    truth = replace(known_of(without_dwell(), rig), wander=wander)
    start = Design(tuple(range(8)), 1, 1.0)
    along = compose(without_dwell(itinerary__laps=2), rig).design or start
    least = _cost(truth, along, best_dwell_s(truth, along))
    generator = generator_of(f"plan dwell {mask}", source)
    chosen = []
    for _ in range(nights):
        measurement = without_dwell(itinerary__laps=2, pilot={"counts": _pilot(wander, generator)})
        chosen.append(float(compose(measurement, rig).dwell_s[0]))
    return [_cost(truth, along, dwell_s) / least - 1 for dwell_s in chosen]


def _cost(known: Known, design: Design, dwell_s: float) -> float:
    return pair_cost(known, replace(design, dwell_s=dwell_s)).time_variance


def _figures(loss: np.ndarray[Any, Any]) -> dict[str, Any]:
    return {
        "nights": len(loss),
        "median": float(np.median(loss)),
        "ninety": float(np.quantile(loss, 0.9)),
        "worst": float(loss.max()),
    }


def _pilot(wander: Wander, generator: np.random.Generator) -> list[int]:
    """Return counts of a steady opening, a second each."""
    time_s = np.arange(SECONDS)
    level = np.cumsum(np.sqrt(wander.walk_per_s) * generator.standard_normal(SECONDS))
    for variance, relax_s in wander.relaxing:
        keep = np.exp(-1 / relax_s)
        steps = np.sqrt(variance * (1 - keep**2)) * generator.standard_normal(SECONDS)
        steps[0] = np.sqrt(variance) * generator.standard_normal()
        state = np.empty(SECONDS)
        now = 0.0
        for at, step in enumerate(steps):
            now = keep * now + step
            state[at] = now
        level = level + state
    for size, period_s in wander.lines:
        level = level + size * np.sin(2 * np.pi * time_s / period_s + generator.uniform(0, 2 * np.pi))
    counts: list[int] = generator.poisson(RATE_HZ * np.exp(level)).tolist()
    return counts
