"""Masks: what the tasks about the mask say of their own errors, and how surely a wrong chip is refused."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
from scipy.stats import t as student

from daq.errors import DaqError
from daq.estimate.arrays import FloatArray, IntArray
from daq.tasks.backlash import PATTERN, reversal
from daq.tasks.drawing import named
from daq.tasks.flanks import balance_mm, ramp_mm
from daq.tasks.memory import memory
from daq.tasks.settle import GATE_S, Stroke, transient
from daq.tasks.windows import fitted, window
from tests.studies.bench import generator_of
from tests.studies.figures import against, within
from tests.studies.rows import Each, rows

DRAWS = 2000
EDGE_MM, BACKGROUND, RAMP_MM = 0.1, 0.02, 0.3
PLATEAUS = (200, 2_000, 20_000)
DRAWN_MM = {"A": 2.0, "AB": 4.0, "B": 6.0, "AC": 8.0, "ABC": 10.0, "BC": 12.0, "C": 14.0, "key": 18.4}
SEEN_MM, ERROR_MM = 0.05, 0.06  # how a coarse scan scatters, and what it is taken for
CREEP, PLAY, REPEATS = 0.3, 2.0, (5, 10, 20)  # in scatters of one visit
OFF_MM, FLANKS = 0.004, (500, 50_000)  # plateau counts of a visit
GATES, WAITS = 8, (3e-5, 1e-4, 1e-3)  # what a visit may be off by
SHARE, STANDS = 1e-3, 60
RATES = np.array([800.0, 40.8e3, 40.8e3, 160.8e3, 40.8e3, 40.8e3 * 4, 160.8e3, 360.8e3]) * 2.0


def study(nights: int = DRAWS, each: Each = rows) -> dict[str, Any]:
    """Return the figures of every task; a draw is one measurement at the bench."""
    return {
        "about": f"windows with edges of {EDGE_MM:g} mm in such steps, background {BACKGROUND:g}; straight "
        f"ramps {RAMP_MM:g} mm wide; creep of {CREEP:g} scatters a visit; waits by the fit, light that "
        "fades by about 2 % in 0.05 to 0.7 s; 60 stands of 2 s",
        "rows": each("masks:row", {name: [name, nights] for name in _drawn()}),
    }


def row(name: str, draws: int) -> dict[str, Any]:
    """Return the figures of so many draws of one task, or of one kind of chip."""
    return _drawn()[name](draws)


def _drawn() -> dict[str, Callable[[int], dict[str, Any]]]:
    """Return what draws each row."""
    found: dict[str, Callable[[int], dict[str, Any]]] = {}
    for plateau in PLATEAUS:
        found[f"register, {plateau} counts"] = partial(_register, plateau, window, "blurred")
        found[f"register, straight ramps, {plateau} counts"] = partial(_register, plateau, ramps, "straight")
    found["chip as drawn"] = partial(_named, lambda seen, _: seen, " ".join(DRAWN_MM))
    found["chip turned round"] = partial(_named, lambda seen, _: np.sort(20.0 - seen), "in the wrong way")
    found["a window missing"] = partial(_named, lambda seen, at: np.delete(seen, at % len(seen)), "7 windows")
    found |= {f"backlash, {repeats} times": partial(_backlash, repeats) for repeats in REPEATS}
    found |= {f"flank balance, {plateau} counts": partial(_balance, plateau) for plateau in FLANKS}
    found |= {f"settle, waits for {limit:.0e}": partial(_settle, limit) for limit in WAITS}
    return found | {f"memory of {SHARE:.0e}": _memory}


def ramps(place_mm: FloatArray, values: FloatArray) -> FloatArray:
    """Return the counts of a window with straight ramps, as wide as a study has them."""
    background, height, left, right, _ = values
    rising, falling = (np.clip((place_mm - at) / RAMP_MM + 0.5, 0.0, 1.0) for at in (left, right))
    return np.asarray(background + height * (rising - falling))


def _register(
    plateau: int, shape: Callable[[FloatArray, FloatArray], FloatArray], name: str, draws: int
) -> dict[str, Any]:
    """Return how exact a centre is against the Fisher matrix of the true edges."""
    random = generator_of("masks", f"register {plateau} {name}")
    place_mm = np.arange(-1.0, 1.0001, EDGE_MM)
    truth = np.array([BACKGROUND * plateau, plateau, -0.5, 0.5, EDGE_MM])
    start = np.array([0.05 * plateau, 0.9 * plateau, -0.45, 0.55, 0.07])
    counts = [random.poisson(shape(place_mm, truth)).astype(float) for _ in range(draws)]
    found = [fitted(place_mm, one, start) for one in counts]
    row = against(
        np.array([one.centre_mm for one in found]),
        np.array([one.centre_se_mm for one in found]),
        0.0,
        _fisher_mm(place_mm, truth, shape),
    )
    meets = {"exact": row["over_formula"] <= 1.10, "not off": abs(row["bias"]) <= 0.1}
    return row | {"meets": meets if name == "blurred" else {"not off": meets["not off"]}}


def _fisher_mm(
    place_mm: FloatArray, truth: FloatArray, shape: Callable[[FloatArray, FloatArray], FloatArray]
) -> float:
    """Return the least standard error of a centre whose edges are known to be so: only it moves."""
    step = np.array([0.0, 0.0, 1e-4, 1e-4, 0.0])
    slope = (shape(place_mm, truth + step) - shape(place_mm, truth - step)) / 2e-4
    return float(1 / np.sqrt(np.sum(slope**2 / shape(place_mm, truth))))


def _named(spoil: Callable[[FloatArray, int], FloatArray], said: str, draws: int) -> dict[str, Any]:
    """Return how often a chip is taken for what it is: recognised, or refused with the right words."""
    random = generator_of("masks", f"named {said}")
    right = 0
    for at in range(draws):
        seen = np.array(list(DRAWN_MM.values())) + random.uniform(-0.3, 0.3)
        seen = spoil(seen + random.normal(0.0, SEEN_MM, len(seen)), at)
        right += said in _told(seen)
    return {"draws": draws, "right": right / draws, "meets": {"right": right == draws}}


def _told(seen_mm: FloatArray) -> str:
    """Return what is said of a chip: its openings, or why it is refused."""
    try:
        return " ".join(named(seen_mm, DRAWN_MM, ERROR_MM))
    except DaqError as error:
        return str(error)


def _backlash(repeats: int, draws: int) -> dict[str, Any]:
    random = generator_of("masks", f"backlash {repeats}")
    moved = np.resize(np.array(PATTERN, float), 2 * repeats)
    creeping = PLAY / 2 * moved + CREEP * np.arange(2 * repeats)
    found = np.array([reversal(moved, creeping + random.standard_normal(2 * repeats)) for _ in range(draws)])
    row = against(found[:, 0], found[:, 1], PLAY, float(2 / np.sqrt(2 * repeats)))
    inside = float(np.mean(np.abs(found[:, 0] - PLAY) <= 3 * found[:, 1]))
    meets = {"formula": within(row["over_formula"], 0.95, 1.05), "inside": inside >= _inside(2 * repeats - 3)}
    return row | {"right": inside, "meets": meets}


def _inside(dof: int) -> float:
    """Return what part of Student's t lies within three errors, less what a study cannot tell."""
    return float(1 - 2 * student.sf(3, dof)) - 0.01


def _balance(plateau: int, draws: int) -> dict[str, Any]:
    random, ramp = generator_of("masks", f"balance {plateau}"), ramp_mm(EDGE_MM)
    truth = np.array([0.0, plateau, -0.5 + OFF_MM, 0.5 + OFF_MM, EDGE_MM])
    left, right = (random.poisson(window(np.array([at]), truth)[0], draws) for at in (-0.5, 0.5))
    found = np.array([balance_mm(float(a), float(b), ramp) for a, b in zip(left, right, strict=True)])
    row = against(found[:, 0], found[:, 1], OFF_MM, float(ramp / (2 * np.sqrt(plateau))))
    return row | {"meets": {"formula": within(row["over_formula"], 0.95, 1.05)}}


def _settle(limit: float, draws: int) -> dict[str, Any]:
    """Return how often a visit that waits as long as the fit asks for is off by no more than is allowed."""
    random, dwell_s = generator_of("masks", f"settle {limit}"), 2.2
    since_s = np.asarray(0.3 * np.arange(GATES), float)
    held, waits = 0, []
    for _ in range(draws):
        size = 0.02 * random.standard_normal()
        time_s = float(np.exp(random.uniform(np.log(0.05), np.log(0.7))))
        fading = np.exp(-since_s / time_s) * -np.expm1(-GATE_S / time_s) * time_s / GATE_S
        counts = random.poisson(3e6 * (1 + size * fading)).astype(float)
        wait_s = Stroke(8.0, counts, since_s, transient(counts, since_s, GATE_S)).wait_s(dwell_s, limit)
        off = abs(size) * time_s / dwell_s * np.exp(-wait_s / time_s) * -np.expm1(-dwell_s / time_s)
        held += bool(off <= limit)
        waits.append(wait_s)
    share = held / draws
    return {
        "draws": draws,
        "right": share,
        "wait_s": float(np.median(waits)),
        "meets": {"right": share >= 0.95},
    }


def _memory(draws: int) -> dict[str, Any]:
    random = generator_of("masks", "memory")
    before, middle_s = _there_and_back(np.array([1, 3, 2, 5, 7, 6, 4, 0]))
    mean = RATES + SHARE * (RATES[before] - RATES)
    found = []
    for _ in range(draws):
        walk = np.zeros(middle_s.size)
        steps = 0.01 * np.sqrt(2.8 / 3600) * random.standard_normal(middle_s.size)
        walk[np.argsort(middle_s, axis=None)] = np.cumsum(steps)
        light = np.exp(walk.reshape(middle_s.shape) - 0.03 * middle_s / 3600)
        found.append(memory(random.poisson(mean * light).astype(float), middle_s, before))
    se = np.array([one.se for one in found])
    row = against(np.array([one.share for one in found]), se, SHARE, float(se.mean()))
    del row["over_formula"], row["over_formula_se"]  # that formula is in a test of the task
    alarms = float(np.mean([one.p < 1e-3 for one in found]))
    meets = {"said": within(row["over_said"], 0.95, 1.05), "alarms": alarms <= 3e-3}
    return {**row, "alarms": alarms, "meets": meets}


def _there_and_back(order: IntArray) -> tuple[IntArray, FloatArray]:
    """Return which opening came before each visit, and when it was half over [s], by stand and opening."""
    before, middle_s = np.zeros((STANDS, len(order)), int), np.zeros((STANDS, len(order)))
    for stand in range(STANDS):
        row = order if stand % 2 == 0 else order[::-1]
        before[stand, row] = [row[0], *row[:-1]]
        middle_s[stand, row] = 23.0 * stand + 2.8 * np.arange(len(order))
    return before, middle_s
