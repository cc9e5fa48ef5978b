"""Orders compared: every drift on one machine, and the time that each order takes on three machines.

The published-style tables that these figures stand against were computed apart, once, with gates as points in
time; the program's own figures average the drift over each gate.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray, IntArray
from daq.itinerary import Wander, blocked, cyclic, shuffled, walk, zigzag
from daq.itinerary.cost import Pattern
from daq.itinerary.orders import Order
from tests.studies.bench import generator_of
from tests.studies.plan_bench import NATURAL, NIGHT_S, POSITIONS, Machine, Timed, pattern, q_of, timed
from tests.studies.rows import Each, rows

HOUR_S = 3600.0
KNOWN_PATHS, PATHS, AT_ONCE = 300, 4000, 100  # the known figures of the walk rest on 300 simulated paths
MACHINE, DWELL_S, WALK = Machine(0.5, 0.2), 2.0, walk(0.03)
FLICKER = Wander(relaxing=tuple((0.005**2, float(time_s)) for time_s in np.geomspace(3.0, 1e4, 10)))
TIE = 0.01  # the known figures rest on 300 paths of the walk: Q is known to about this
COLUMNS = (
    *("counting", "linear", "quadratic", "exponential", "walk", "flicker"),
    *("sine 20", "sine 60", "sine 180", "steps", "Q"),
)

# Laps, then 1e-6 of kappa by column and Q: an independent computation of the same bench (gates as points).
KNOWN: Mapping[str, tuple[int, tuple[float, ...]]] = {
    "blocked": (46, (98.9, 41777, 31331, 9454, 34035, 7666, 578, 3366, 3516, 24691, 137000)),
    "sweep inner, cyclic": (46, (98.9, 860, 843, 644, 847, 1129, 262, 71, 72, 494, 87)),
    "sweep inner, mirrored": (46, (98.9, 4.0, 14, 105, 832, 1197, 303, 81, 22, 513, 83)),
    "cyclic": (38, (108.9, 24.3, 24.1, 17.2, 34.5, 241, 5.9, 1.2, 2.2, 23.5, 1.57)),
    "random": (34, (115.1, 3.8, 3.9, 1.1, 42.7, 268, 25, 5.5, 2.1, 29.7, 1.76)),
    "Williams rows": (34, (115.1, 0.6, 0.4, 4.8, 52.1, 259, 20, 3.0, 0.4, 31.4, 1.88)),
    "Prouhet, base 8": (38, (108.9, 0.9, 0.8, 0.1, 42.0, 268, 26, 6.0, 0.5, 27.5, 1.66)),
    "mirror in Thue-Morse order": (40, (106.1, 0.4, 0.5, 0.7, 35.5, 251, 5.1, 0.8, 0.3, 21.2, 1.51)),
    "zig-zag": (40, (106.1, 0.00, 0.00, 0.02, 32.8, 237, 0.01, 0.03, 0.00, 18.8, 1.45)),
    "palindrome in one stand": (40, (106.1, 0.00, 0.01, 0.08, 34.6, 258, 0.07, 0.09, 0.02, 21.4, 1.46)),
}


def study(nights: int = 20, each: Each = rows) -> dict[str, Any]:
    """Return the figures of every order; `nights` draws of the random one."""
    table = each("plan_orders:row", {name: [name, nights] for name in KNOWN})
    by_q = sorted(table, key=lambda name: table[name]["figures"]["Q"])
    for name, one in table.items():
        one["meets"]["ranking"] = not _misplaced(name, table)
    return {
        "about": f"{POSITIONS} positions, mask 0.5 s + 0.2 s a slot, dwell {DWELL_S:g} s, "
        f"{NIGHT_S / HOUR_S:g} h; 1e-6 of kappa, gates as points; Q also with gates averaged",
        "ranking": by_q,
        "rows": table,
    }


def row(name: str, nights: int) -> dict[str, Any]:
    """Return the figures of one order."""
    of, (laps, known) = pattern(), KNOWN[name]
    draws = [timed(of, order, MACHINE, DWELL_S) for order in _orders(name, laps, nights)]
    found = {
        column: float(np.sqrt(np.mean([_column(of, draw, column) ** 2 for draw in draws])))
        for column in COLUMNS
    }
    ratios = {
        column: found[column] / value
        for column, value in zip(COLUMNS, known, strict=True)
        if value > 1 and column != "Q"
    }
    q_ratio = found["Q"] / known[-1]
    simulated, simulated_se = _simulated(name, draws[0])
    return {
        "laps": laps,
        "figures": found,
        "Q with gates averaged": float(np.mean([q_of(of, draw, WALK, 1.0) for draw in draws])),
        "Q over known": q_ratio,
        "known off": _known_errors(of, draws, found["Q"], known[-1]),
        "simulated": simulated,
        "simulated_se": simulated_se,
        "farthest ratio": max(ratios.values(), key=lambda ratio: abs(np.log(ratio)), default=1.0),
        "farthest column": max(ratios, key=lambda key: abs(np.log(ratios[key])), default=""),
        "meets": {
            "Q": abs(q_ratio - 1) <= 0.03,
            "simulated": abs(simulated - 1) <= 3 * simulated_se,
            "columns": all(1 / 1.5 <= ratio <= 1.5 for ratio in ratios.values()),
        },
    }


def _known_errors(of: Pattern, draws: list[Timed], found_q: float, known_q: float) -> float:
    """Return how far a known Q lies off ours, in standard errors of the paths that it was drawn from."""
    still_q = float(np.mean([q_of(of, draw, Wander(), 0.0) for draw in draws]))
    return float((known_q - found_q) / ((found_q - still_q) * (2 / KNOWN_PATHS) ** 0.5))


def _simulated(name: str, draw: Timed) -> tuple[float, float]:
    """Return the simulated variance of an order under the walk over ours, and its standard error."""
    generator = generator_of("plan orders, paths", name)
    middle_s = draw.start_s + draw.dwell_s / 2
    step = np.sqrt(WALK.walk_per_s * np.diff(middle_s, prepend=middle_s[0]))
    errors = np.concatenate(
        [
            np.cumsum(step * generator.standard_normal((AT_ONCE, step.size)), axis=1) @ draw.weight
            for _ in range(PATHS // AT_ONCE)
        ]
    )
    ratio = float(np.mean(errors**2)) / draw.drift_var(WALK, 0.0)
    return ratio, ratio * (2 / PATHS) ** 0.5


def _misplaced(name: str, rows: Mapping[str, Any]) -> list[str]:
    """Return the orders that stand the other way round than known, by more than a tie."""
    return [
        other
        for other in rows
        if (KNOWN[name][1][-1] - KNOWN[other][1][-1])
        * (rows[name]["figures"]["Q"] - rows[other]["figures"]["Q"])
        < 0
        and abs(rows[name]["figures"]["Q"] / rows[other]["figures"]["Q"] - 1) > TIE
    ]


def _column(of: Pattern, draw: Timed, column: str) -> float:
    if column == "Q":
        return q_of(of, draw, WALK, 0.0)
    if column == "counting":
        return float(1e6 * draw.counting_var**0.5)
    hours = (draw.start_s + draw.dwell_s / 2) / HOUR_S
    share = hours * HOUR_S / NIGHT_S
    levels = {
        "linear": -0.03 * hours,
        "quadratic": -0.1 * share - 0.2 * share**2,
        "exponential": -0.2 * -np.expm1(-hours),
    }
    if column in levels:
        return 1e6 * abs(draw.error(levels[column]))
    wanders = {"walk": WALK, "flicker": FLICKER, "steps": walk(0.02)} | {
        f"sine {minutes}": Wander(lines=((0.02, 60.0 * minutes),)) for minutes in (20, 60, 180)
    }
    return float(1e6 * draw.drift_var(wanders[column], 0.0) ** 0.5)


def _orders(name: str, laps: int, nights: int) -> list[Order]:
    heads = np.ones((laps + 1) // 2, bool)
    if name == "random":
        generator = generator_of("plan orders", name)
        return [shuffled(NATURAL, POSITIONS, laps, generator) for _ in range(nights)]
    made = {
        "blocked": lambda: blocked(NATURAL, POSITIONS, laps),
        "sweep inner, cyclic": lambda: _swept(laps),
        "sweep inner, mirrored": lambda: zigzag(NATURAL, POSITIONS, laps, heads, together=POSITIONS),
        "cyclic": lambda: cyclic(NATURAL, POSITIONS, laps),
        "Williams rows": lambda: _rows(laps, _williams()),
        "Prouhet, base 8": lambda: _rows(laps, _shifts()),
        "mirror in Thue-Morse order": lambda: _rows(laps, _mirrors(laps * POSITIONS)),
        "zig-zag": lambda: zigzag(NATURAL, POSITIONS, laps, heads),
        "palindrome in one stand": lambda: cyclic((*NATURAL, *NATURAL[::-1]), POSITIONS, laps // 2),
    }
    return [made[name]()]


def _rows(laps: int, rows: IntArray) -> Order:
    """Return an order whose stand n shows its openings as row n says (rows repeat)."""
    plain = cyclic(NATURAL, POSITIONS, laps)
    slot = rows[np.arange(laps * POSITIONS) % len(rows)].ravel()
    return Order(np.array(NATURAL)[slot], slot, plain.position, plain.stand, plain.lap)


def _williams() -> IntArray:
    """Return the rows of a Williams square of eight: every slot follows every other one once."""
    first = [0, 1, 7, 2, 6, 3, 5, 4]
    return (np.array(first)[None, :] + np.arange(8)[:, None]) % 8


def _shifts() -> IntArray:
    """Return cyclic shifts in the order of Prouhet's sequence in base 8 (sum of digits modulo 8)."""
    numbers = np.arange(8**4)
    shift = sum(numbers // 8**digit % 8 for digit in range(4)) % 8
    return np.asarray((np.arange(8)[None, :] + np.asarray(shift)[:, None]) % 8)


def _mirrors(stands: int) -> IntArray:
    """Return stands forward or backward by the Thue-Morse sequence."""
    numbers = np.arange(stands)
    ones = np.array([int(number).bit_count() for number in numbers]) % 2
    return np.where(ones[:, None] == 1, np.arange(8)[::-1], np.arange(8))


def _swept(laps: int) -> Order:
    """Return laps in which each opening sweeps all positions, to and fro, always in the same order."""
    opening = np.tile(np.repeat(np.arange(8), POSITIONS), laps)
    sweep = np.arange(8 * laps)
    place: FloatArray = np.where((sweep % 2 == 0)[:, None], np.arange(POSITIONS), np.arange(POSITIONS)[::-1])
    lap = np.repeat(np.arange(laps), 8 * POSITIONS)
    position = place.ravel().astype(np.int64)
    return Order(np.array(NATURAL)[opening], opening, position, lap * POSITIONS + position, lap)
