"""Complete zig-zag nights under every source: the plain contrast, its bar, and the monitor under flicker."""

from __future__ import annotations

from math import sqrt
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.tables import kappa_of, over
from daq.estimate.whole import estimate_visits
from tests.studies.bench import Night, generator_of, least_se, night, reduced, strengths, visits_of_counts
from tests.studies.figures import figures, within
from tests.studies.rows import Each, rows
from tests.studies.sources import SOURCES, walk

NIGHTS = 8000
MONITOR_COUNTS = 1e6  # a visit; the monitor has a walk of its own
MONITOR_WALK = walk(0.003)


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return the figures of every source, and whether each meets its target."""
    of, whole = reduced(), night()
    few = max(2, nights // 8)
    wanted: dict[str, list[Any]] = {source: [source, nights] for source in SOURCES}
    wanted |= {f"Lantern, {source}": [source, few, True] for source in ("none", "random walk", "mix")}
    return {
        "about": f"{len(of.plan.stand)} visits, {of.plan.planned_pairs} pairs, zig-zag, plain contrast; "
        f"Lantern: {len(whole.plan.stand)} visits, {whole.plan.planned_pairs} pairs",
        "counting_se": of.counting_se,
        "rows": each("zigzag:row", wanted),
    }


def row(source: str, nights: int, whole: bool = False) -> dict[str, Any]:
    """Return the figures of one source, on the whole Lantern night or the reduced one."""
    of = night() if whole else reduced()
    generator = generator_of(f"zigzag {len(of.plan.stand)}", source)
    plain, monitored, least = _Pile(of), _Pile(of), []
    for at, strength in enumerate(strengths(of, source, nights, generator)):
        counts = generator.poisson(of.expected * strength).astype(float)
        live = np.broadcast_to(of.dwell_s, counts.shape)
        plain.add(counts, live)
        if at < 3:
            least += [least_se(of, source, one) for one in strength[:3]]
        if at == 0:
            _same_as_the_program(of, counts[:3], plain)
        if source == "flicker":
            monitored.add(counts, live * _monitor(of, strength, generator))
    found = plain.figures()
    bound = sqrt(float(np.mean(np.square(least)))) / of.counting_se
    found |= {
        "bound": bound,
        "sd_over_bound": found["sd"] / bound,
        "sd_over_bound_se": found["sd_se"] / bound,
    }
    if source == "flicker":
        found["monitored"] = monitored.figures()
    return found | {"meets": _meets(source, found)}


def _meets(source: str, found: dict[str, Any]) -> dict[str, bool]:
    covered = within(found["coverage_95"], 0.935, 0.965)
    if source == "flicker":
        with_monitor = found["monitored"]
        return {
            "coverage": covered and within(with_monitor["coverage_95"], 0.935, 0.965),
            "sd": with_monitor["sd"] <= 1.15,
        }
    return {
        "bias": abs(found["bias"]) <= 0.1,
        "sd": found["sd_over_bound"] <= 1.03 + 2 * found["sd_over_bound_se"],
        "coverage": covered,
    }


class _Pile:
    """Kappa and its jackknife of night after night, from counts and exposures by visit."""

    def __init__(self, of: Night) -> None:
        self._of = of
        plan = of.plan
        self._shape = (plan.planned_pairs, *of.rates_hz.shape)
        cell = (plan.pair * self._shape[1] + plan.position) * self._shape[2] + plan.opening
        self._order = np.argsort(cell, kind="stable")
        self.kappa: list[FloatArray] = []
        self.se: list[FloatArray] = []

    def add(self, value: FloatArray, exposure: FloatArray) -> None:
        """Take in nights; every cell of a pair has the same number of visits."""
        value, exposure = (self._cells(table) for table in (value, exposure))
        seen = np.ones(self._shape[1], bool)
        every = [table.sum(axis=1) for table in (value, exposure)]
        self.kappa.append(kappa_of(over(*every), seen, self._of.plan))
        without = (total[:, None] - table for total, table in zip(every, (value, exposure), strict=True))
        parts = kappa_of(over(*without), seen, self._of.plan)
        pairs = self._shape[0]
        self.se.append(
            np.sqrt((pairs - 1) / pairs * np.sum((parts - parts.mean(axis=1, keepdims=True)) ** 2, axis=1))
        )

    def figures(self) -> dict[str, Any]:
        """Return the figures so far."""
        dof = self._shape[0] - 1
        return figures(np.concatenate(self.kappa), np.concatenate(self.se), dof, self._of.counting_se)

    def _cells(self, by_visit: FloatArray) -> FloatArray:
        cells = by_visit[:, self._order].reshape(len(by_visit), np.prod(self._shape), -1).sum(axis=-1)
        return np.asarray(cells.reshape(len(by_visit), *self._shape))


def _monitor(of: Night, strength: FloatArray, generator: np.random.Generator) -> FloatArray:
    """Return what a monitor says of the strength of each visit over its stand's mean."""
    own = MONITOR_WALK(of.time_s, len(strength), generator)
    counts = generator.poisson(MONITOR_COUNTS * strength * own).astype(float)
    by_stand = counts.reshape(len(counts), -1, of.plan.whole_stand)
    return np.asarray((by_stand / by_stand.mean(axis=-1, keepdims=True)).reshape(counts.shape))


def _same_as_the_program(of: Night, counts: FloatArray, pile: _Pile) -> None:
    """See that the piled-up figures are those of the program, night by night."""
    for at, one in enumerate(counts):
        found = estimate_visits(visits_of_counts(of, one), of.plan)
        assert found.kappa is not None and found.kappa_se is not None
        assert np.isclose(found.kappa, pile.kappa[0][at], rtol=1e-9, atol=1e-15)
        assert np.isclose(found.kappa_se, pile.se[0][at], rtol=1e-9)
