"""Loads: what an uncertainty of each slit's place and width does to kappa where slits were cut apart."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace

import numpy as np

from daq.estimate.arrays import FloatArray
from daq.estimate.plan import Plan
from daq.estimate.slits import Slits
from daq.estimate.tables import kappa_of


@dataclass(frozen=True, slots=True)
class Instance:
    """One slit as it was cut: the openings (bit masks) that show it, centre and width with uncertainties."""

    name: str
    letter: str
    openings: tuple[int, ...]
    centre_m: float
    width_m: float
    centre_u_m: float
    width_u_m: float


def slit_loads(
    instances: Sequence[Instance], plan: Plan, rates_of: Callable[[Mapping[int, Slits]], FloatArray]
) -> dict[str, float]:
    """Return the change of kappa for one standard uncertainty of every centre and width, by name.

    Parameters
    ----------
    rates_of
        Expected rates (J, K) for the slits that each opening shows.

    Notes
    -----
    First order, at the described geometry. A slit that all openings share has no load: expected rates
    have a kappa of zero for whatever slits there are, as long as they are the same.
    """
    seen = np.ones(len(plan.positions_mm), bool)

    def kappa(changed: Sequence[Instance]) -> float:
        return float(kappa_of(rates_of(_shown(changed, plan)), seen, plan))

    start, loads = kappa(instances), {}
    for at, one in enumerate(instances):
        for what, moved in (
            ("centre", replace(one, centre_m=one.centre_m + one.centre_u_m)),
            ("width", replace(one, width_m=one.width_m + one.width_u_m)),
        ):
            if moved != one:
                loads[f"{one.name} {what}"] = kappa([*instances[:at], moved, *instances[at + 1 :]]) - start
    return loads


def _shown(instances: Sequence[Instance], plan: Plan) -> dict[int, dict[str, tuple[float, float]]]:
    shown: dict[int, dict[str, tuple[float, float]]] = {int(mask): {} for mask in plan.openings}
    for one in instances:
        for mask in one.openings:
            shown[mask][one.letter] = (one.centre_m, one.width_m)
    return {mask: dict(sorted(slits.items())) for mask, slits in shown.items()}
