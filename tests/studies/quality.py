"""Quality rules: false flags on quiet nights, and how many faults of a kind are found on spoilt ones."""

from __future__ import annotations

from collections import Counter
from dataclasses import replace
from typing import Any

import numpy as np

from daq import openings
from daq.estimate import Judge, Rules
from daq.estimate.arrays import FloatArray, IntArray
from daq.records import Quality, Reading
from tests.studies.bench import Night, generator_of, night
from tests.studies.rows import Each, rows
from tests.studies.sources import walk

NIGHTS = 100
SLICES = 10
FAULTS = 20  # a night
BRIGHT = 1e5 / 88e3  # strength at which the middle of a single slit brings 1e5 counts a visit
COUNTED = Quality.FINGERPRINT | Quality.DISPERSION | Quality.NO_COUNTS | Quality.MONITOR
QUIET = {"quiet, 0.3 % per root hour": 0.003, "quiet, 3 % per root hour": 0.03}
LOSSES = {"half of the counts": 0.5, "5 % of the counts": 0.05, "30 % in one slice": 0.03}


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return flags a night and shares found, and whether each meets its target."""
    of = night()
    spoilt = max(1, nights // 4)
    wanted = {name: [name, nights] for name in QUIET} | {name: [name, spoilt] for name in LOSSES}
    return {
        "about": f"{len(of.plan.stand)} visits, 1e5 counts behind one slit at the centre, {SLICES} slices, "
        f"default thresholds; {FAULTS} faults a night, each a loss of counts in one visit with light",
        "rows": each("quality:row", wanted),
    }


def row(name: str, nights: int) -> dict[str, Any]:
    """Return the figures of quiet nights, or of spoilt ones."""
    if name in QUIET:
        return _quiet(night(), name, QUIET[name], nights)
    return _spoilt(night(), name, LOSSES[name], nights)


def _quiet(of: Night, name: str, per_sqrt_hour: float, nights: int) -> dict[str, Any]:
    generator, flags = generator_of("quality", name), Counter[str]()
    for _ in range(nights):
        slices = _drawn(of, walk(per_sqrt_hour)(of.time_s, 1, generator)[0], generator)
        for reading in _judged(of, slices)[0]:
            flags.update(str(bit.name) for bit in COUNTED if reading.quality & bit)
    total = sum(flags.values()) / nights
    by_rule = {rule.lower(): many / nights for rule, many in flags.items()}
    return {"nights": nights, "flags": total, "by_rule": by_rule, "meets": {"false flags": total <= 1}}


def _spoilt(of: Night, name: str, loss: float, nights: int) -> dict[str, Any]:
    generator = generator_of("quality", name)
    found, named, faults = 0, 0, 0
    for _ in range(nights):
        slices = _drawn(of, walk(0.003)(of.time_s, 1, generator)[0], generator)
        places = _places(of, generator)
        in_slice = name.endswith("slice")
        for visit in places:
            _lose(slices, int(visit), 0.3 if in_slice else loss, in_slice, generator)
        judged, said = _judged(of, slices)
        bit = Quality.DISPERSION if in_slice else Quality.FINGERPRINT
        spoilt = {int(of.plan.stand[reading.visit]) for reading in judged if reading.quality & bit}
        for visit in places:
            stand = int(of.plan.stand[visit])
            faults, found = faults + 1, found + (stand in spoilt)
            right = openings.name(int(of.plan.openings[of.plan.opening[visit]]))
            named += stand in spoilt and (in_slice or f" {right} " in said.get(stand, ""))
    least = {"half of the counts": 0.99, "5 % of the counts": 0.75, "30 % in one slice": 0.95}[name]
    wrong = 1 - named / found if found else 0.0
    share = found / faults
    return {
        "nights": nights, "faults": faults, "found": share, "wrongly_named": wrong,
        "meets": {"found": share >= least, "named": wrong <= 0.02},
    }  # fmt: skip


def _drawn(of: Night, strength: FloatArray, generator: np.random.Generator) -> IntArray:
    """Return counts by visit and slice."""
    mean = of.expected * strength * BRIGHT / SLICES
    return generator.poisson(mean[:, None], (len(mean), SLICES))


def _places(of: Night, generator: np.random.Generator) -> IntArray:
    """Return visits with light from the third lap on, in different stands."""
    stands = int(of.plan.stand.max()) + 1
    first = 2 * len(of.plan.positions_mm)
    chosen = generator.choice(np.arange(first, stands), FAULTS, replace=False)
    lit = of.plan.opening != 0
    return np.array([generator.choice(np.flatnonzero((of.plan.stand == stand) & lit)) for stand in chosen])


def _lose(slices: IntArray, visit: int, loss: float, in_slice: bool, generator: np.random.Generator) -> None:
    """Thin the counts of a visit, or of one of its slices."""
    part = slice(3, 4) if in_slice else slice(None)
    slices[visit, part] = generator.binomial(slices[visit, part], 1 - loss)


def _judged(of: Night, slices: IntArray) -> tuple[list[Reading], dict[int, str]]:
    """Return the readings with their bits, and what was said of each stand."""
    judge, said, judged = Judge(of.plan, Rules(), of.rates_hz * BRIGHT), {}, []
    for reading in _readings(of, slices):
        judged.append(judge.judge(reading))
        if judge.finding:
            said[int(of.plan.stand[reading.visit])] = judge.finding
    return judged, said


def _readings(of: Night, slices: IntArray) -> list[Reading]:
    opens = (of.time_s * 1e9).astype(np.int64)
    first = Reading(
        visit=0, attempt=1, opening=0, position_mm=0.0, dwell_s=1.0, gate_open_ns=0, gate_close_ns=0,
        utc_ns=0, live_s=1.0, values=(0,),
    )  # fmt: skip
    return [
        replace(
            first,
            visit=visit,
            position_mm=float(of.plan.positions_mm[of.plan.position[visit]]),
            dwell_s=float(of.dwell_s[visit]),
            live_s=float(of.dwell_s[visit]),
            gate_open_ns=int(opens[visit]),
            gate_close_ns=int(opens[visit] + of.dwell_s[visit] * 1e9),
            utc_ns=int(opens[visit]),
            values=(int(slices[visit].sum()),),
            slices=tuple((int(count),) for count in slices[visit]),
        )
        for visit in range(len(opens))
    ]
