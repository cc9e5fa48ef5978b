from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest

from daq.estimate import Plan, expected_rates_hz, planned_weights
from daq.estimate.arrays import FloatArray
from daq.estimate.loads import Instance, slit_loads
from daq.estimate.slits import Slits
from daq.openings import name
from tests.daq.estimate.nights import SLITS_M, plan

PLACES_MM = np.linspace(-10.0, 10.0, 21)


def rates_of(shown: Mapping[int, Slits]) -> FloatArray:
    return expected_rates_hz(shown, PLACES_MM, 532e-9, 1.2, 40e3, 800.0)


def lantern_plan() -> Plan:
    from dataclasses import replace

    shown = {mask: {} if mask == 0 else {a: SLITS_M[a] for a in name(mask)} for mask in range(8)}
    weights, signs = planned_weights(rates_of(shown), range(8), 3)
    return replace(plan(positions=21, laps=2), positions_mm=PLACES_MM, weights=weights, signs=signs)


def cut(label: str, letter: str, openings: tuple[int, ...], u_m: float = 1e-8) -> Instance:
    centre, width = SLITS_M[letter]
    return Instance(label, letter, openings, centre, width, u_m, u_m)


def test_slits_that_every_opening_shares_carry_no_load() -> None:
    shared = [cut(a, a, tuple(mask for mask in range(8) if mask >> at & 1)) for at, a in enumerate("ABC")]

    loads = slit_loads(shared, lantern_plan(), rates_of)

    assert set(loads) == {f"{a} {what}" for a in "ABC" for what in ("centre", "width")}
    assert max(map(abs, loads.values())) < 1e-12


def apart(u_m: float) -> list[Instance]:
    """Return twelve slits, each opening with its own."""
    return [cut(f"{a} of {name(mask)}", a, (mask,), u_m) for mask in range(1, 8) for a in name(mask)]


def test_slits_cut_apart_carry_loads_in_proportion_to_their_uncertainties() -> None:
    one, double = (slit_loads(apart(u_m), lantern_plan(), rates_of) for u_m in (1e-8, 2e-8))

    assert len(one) == 24
    # 10 nm of a 40 um slit: second order is a thousandth of the first, which is 1e-4 for most.
    assert double == pytest.approx({key: 2 * load for key, load in one.items()}, rel=0.02, abs=3e-7)
    assert max(map(abs, one.values())) > 1e-5


def test_an_exact_slit_has_no_load() -> None:
    assert slit_loads(apart(0.0), lantern_plan(), rates_of) == {}
