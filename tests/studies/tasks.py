"""Tasks: what bench tasks say of their own errors, against many draws and against formulas."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import cache, partial
from typing import Any

import numpy as np
from scipy.stats import norm

from daq.errors import DaqError
from daq.estimate.arrays import FloatArray
from daq.tasks.crossings import dead_time_of_cycles
from daq.tasks.flanks import clipped
from daq.tasks.fringes import Fringes, fringes
from daq.tasks.gaps import dead_time_of_gaps
from daq.tasks.windows import window
from tests.daq.tasks.made import (
    MIDDLE_MM,
    PERIODS_MM,
    crossing_rates,
    cycles_of,
    fringe_sd_mm,
    gate_ticks,
    pair_counts,
    scan_mm,
    sums_sd_s,
)
from tests.studies.bench import generator_of
from tests.studies.figures import against, within
from tests.studies.rows import Each, rows

DRAWS = 4000
TAU_S, WANTED = 40e-9, 0.05  # the dead time, and the share of it that its error shall be
CYCLES = 16
KINDS = ("non-paralysable", "paralysable")
# rate of one slit [1/s], live time of each opening at each crossing [s]
SUMS = ((4e4, 160.0), (1e5, 160.0), (1e6, 32.0))
GAPS = ((1e5, 20_000, 1e-13), (1e5, 20_000, 1e-9), (1e6, 20_000, 1e-9), (1e5, 20_000, 1e-8))
SCANS = ((0.5, 60.0), (0.9, 60.0), (0.5, 6000.0), (0.9, 6000.0))  # visibility, counts of one slit at a place
LOSSES = (1e-5, 1e-4, 1e-3, 1e-2)


def study(nights: int = DRAWS, each: Each = rows) -> dict[str, Any]:
    """Return the figures of every task; a draw is one measurement at the bench."""
    return {
        "about": "dead time 40 ns, even light without background; times are those of each opening at each "
        "crossing; fringes by pair; AC against half of AB at three standard errors; clipping by a million "
        "places of the stage",
        "rows": each("tasks:row", {name: [name, nights] for name in _drawn()}),
    }


def row(name: str, draws: int) -> dict[str, Any]:
    """Return the figures of so many draws of one task."""
    return _drawn()[name](draws)


def _drawn() -> dict[str, Callable[[int], dict[str, Any]]]:
    """Return what draws each row."""
    found: dict[str, Callable[[int], dict[str, Any]]] = {}
    for kind in KINDS:
        for alone_hz, live_s in SUMS:
            name = f"sums, {alone_hz:.0e}/s, {live_s:.0f} s, {kind}"
            found[name] = partial(_sums, alone_hz, live_s, kind)
    needed_s = (sums_sd_s(SUMS[0][0], 1.0) / (WANTED * TAU_S)) ** 2
    found[f"sums for 5 %, {SUMS[0][0]:.0e}/s, {needed_s:.0f} s"] = partial(
        _sums, SUMS[0][0], needed_s, KINDS[0]
    )
    for rate_hz, number, tick_s in GAPS:
        name = f"{number} gaps, {rate_hz:.0e}/s, tick {tick_s:.0e} s"
        found[name] = partial(_gaps, rate_hz, number, tick_s)
    number = round(1 / (SUMS[0][0] * WANTED * TAU_S))
    found[f"gaps for 5 %, {SUMS[0][0]:.0e}/s, {number}"] = partial(_gaps, SUMS[0][0], number, 1e-13)
    for visibility, alone in SCANS:
        for pair in PERIODS_MM:
            name = f"fringe {pair}, visibility {visibility:g}, {alone:.0f} counts a place"
            found[name] = partial(_fringe, pair, visibility, alone)
    found["fringes: AC said not to be half as wide"] = _half
    return found | {f"clipping, {loss:.0e}": partial(_clipped, loss) for loss in LOSSES}


def _sums(alone_hz: float, live_s: float, kind: str, draws: int) -> dict[str, Any]:
    random = generator_of("tasks", f"sums {alone_hz} {live_s} {kind}")
    rates = crossing_rates(alone_hz, background_hz=0.0, far=1.0)
    found = [
        dead_time_of_cycles(cycles_of(rates, CYCLES, live_s / CYCLES, kind, random), kind)
        for _ in range(draws)
    ]
    row = against(
        np.array([one.tau_s for one in found]),
        np.array([one.se_s for one in found]),
        TAU_S,
        sums_sd_s(alone_hz, live_s),
    )
    return row | {"meets": {"said": within(row["over_said"], 0.95, 1.05)}}


def _gaps(rate_hz: float, number: int, tick_s: float, draws: int) -> dict[str, Any]:
    random = generator_of("tasks", f"gaps {rate_hz} {number} {tick_s}")
    found = [
        dead_time_of_gaps([gate_ticks(rate_hz, number // 2, TAU_S, tick_s, random) for _ in range(2)], tick_s)
        for _ in range(draws)
    ]
    row = against(
        np.array([one.tau_s for one in found]),
        np.array([one.se_s for one in found]),
        TAU_S,
        1 / (rate_hz * number),
    )
    return row | {"meets": {"said": within(row["over_said"], 0.95, 1.05)}}


@cache
def _scans(visibility: float, alone: float, draws: int) -> tuple[Fringes, ...]:
    """Return the fit of every scan, for all rows; one that is not seen to have a fringe is left out."""
    random = generator_of("tasks", f"fringes {visibility} {alone}")
    rates = pair_counts(visibility, alone, 1e3)
    wanted = {pair: 1.003 * period for pair, period in PERIODS_MM.items()}
    drawn = ({name: random.poisson(one).astype(float) for name, one in rates.items()} for _ in range(draws))
    return tuple(filter(None, (_fitted(counts, wanted) for counts in drawn)))


def _fitted(counts: Mapping[str, FloatArray], wanted: Mapping[str, float]) -> Fringes | None:
    try:
        return fringes(scan_mm(), counts, wanted, 1e3)
    except DaqError:
        return None


def _fringe(pair: str, visibility: float, alone: float, draws: int) -> dict[str, Any]:
    found = _scans(visibility, alone, draws // 2)
    period_sd, middle_sd = fringe_sd_mm(pair, pair_counts(visibility, alone, 1e3), visibility)
    every = [one.by_pair[pair] for one in found]
    row = against(
        np.array([one.period_mm for one in every]),
        np.array([one.period_se_mm for one in every]),
        PERIODS_MM[pair],
        period_sd,
    )
    middle = against(
        np.array([one.middle_mm for one in every]),
        np.array([one.middle_se_mm for one in every]),
        MIDDLE_MM,
        middle_sd,
    )
    return row | {
        "middle_over_formula": middle["over_formula"],
        "meets": {
            "period": within(row["over_formula"], 0.88, 1.12),
            "middle": within(middle["over_formula"], 0.88, 1.12),
        },
    }


def _half(draws: int) -> dict[str, Any]:
    """Return how often the fringe of the outer slits is said not to be half as wide as that of A and B."""
    found = [one for case in SCANS for one in _scans(*case, draws // 2)]
    z = np.array([_apart(one) for one in found])
    share = float(np.mean(np.abs(z) > 3))
    return {"draws": len(z), "alarms": share, "meets": {"alarms": within(share, 0.001, 0.006)}}


def _apart(found: Fringes) -> float:
    pairs: Mapping[str, float] = {pair: one.period_mm for pair, one in found.by_pair.items()}
    names = list(pairs)
    what = np.zeros(len(names))
    what[names.index("AC")], what[names.index("AB")] = 2.0, -1.0
    return float((2 * pairs["AC"] - pairs["AB"]) / np.sqrt(what @ found.period_covariance @ what))


def _clipped(loss: float, _: int) -> dict[str, Any]:
    random, edge_mm, repeat_mm, width_mm = generator_of("tasks", f"clip {loss}"), 0.04, 0.02, 1.2
    offset_mm = width_mm / 2 - float(norm.isf(loss)) * np.hypot(edge_mm, repeat_mm)
    said = clipped(offset_mm, width_mm, edge_mm, repeat_mm)
    stands = offset_mm + repeat_mm * random.standard_normal(1_000_000)
    lost = 1.0 - window(stands, np.array([0.0, 1.0, -width_mm / 2, width_mm / 2, edge_mm]))
    mean = float(lost.mean())
    return {
        "draws": len(stands),
        "over_said": mean / said,
        "over_said_se": float(lost.std()) / np.sqrt(len(stands)) / said,
        "meets": {"said": within(mean / said, 0.9, 1.1)},
    }
