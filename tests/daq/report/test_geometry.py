from __future__ import annotations

from dataclasses import asdict, replace
from typing import Any

import numpy as np
import pytest
import xarray as xr

from daq.estimate import planned_weights
from daq.estimate.blinding import Blinding
from daq.estimate.cuts import Light, mask_of, patterns
from daq.estimate.geometry import Geometry, geometry_after, geometry_of, wander_s
from daq.estimate.loads import Instance
from daq.estimate.settle import Settled
from daq.estimate.visits import no_visits
from daq.report.geometry import geometry_lines
from tests.daq.estimate.nights import SLITS_M, dataset, plan, reading

CUTS: dict[str, Any] = {
    "wavelength_m": 532e-9,
    "distance_m": 1.2,
    "slits": [
        {
            "name": f"{letter} of {mask}", "letter": letter, "openings": (mask,), "centre_m": centre,
            "width_m": width, "centre_u_m": 1e-8, "width_u_m": 1e-8,
        }
        for mask in range(8)
        for slit, (letter, (centre, width)) in enumerate(SLITS_M.items())
        if mask >> slit & 1
    ],
}  # fmt: skip


LIT = Light(np.full(3, 200.0), np.zeros(3), np.ones(3), 800.0)
PLACES_MM = np.linspace(-8, 8, 21)
MASK = mask_of(
    np.arange(8), 3, tuple(Instance(**one) for one in CUTS["slits"]), np.arctan(PLACES_MM / 1200), 532e-9, 1.2
)
RATES_HZ, _ = patterns(MASK, MASK.measured, LIT)
WEIGHTS, SIGNS = planned_weights(RATES_HZ, range(8), 3)
PLAN = replace(
    plan(positions=21, laps=8, dead_time_s=0.0), positions_mm=PLACES_MM, weights=WEIGHTS, signs=SIGNS
)


def archive(**attributes: Any) -> xr.Dataset:
    counts = np.random.default_rng(1).poisson(2.2 * RATES_HZ[PLAN.position, PLAN.opening])
    found = dataset(PLAN, [reading(PLAN, number, float(count)) for number, count in enumerate(counts)])
    found.attrs |= {"cuts": CUTS} | attributes
    return found


def told(**changes: Any) -> str:
    found = geometry_of(archive())
    assert found is not None
    return "\n".join(geometry_lines({"geometry": asdict(replace(found, **changes))}))


def test_the_residual_with_its_cuts_accounted_for_stands_before_the_one_without() -> None:
    text = told()

    first, second = (text.index(words) for words in ("accounted for:", "before that it is"))
    assert first < second
    assert "what the measurement of the slits leaves open" in text and "|kappa| < 0.00" in text
    assert "all patterns together" in text and "LOOK AT THIS" not in text
    assert all(f"{name}: " in text for name in ("each slit", "A and B", "A and C", "B and C"))


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"joint_fits": False, "joint_kappa": None, "joint_ratio": 40.0}, "chi-squared over freedom is 40"),
        ({"joint_fits": False, "joint_kappa": None, "joint_ratio": None}, "it does not settle"),
        ({"differ": True}, "differ by more than three standard errors"),
    ],
)
def test_a_model_that_fails_is_told_loudly_and_its_figure_is_not(changes: Any, words: str) -> None:
    text = told(**changes)

    assert f"LOOK AT THIS: {'' if 'differ' in words else 'the model'}" in text and words in text
    assert ("all patterns together:" in text) == ("differ" in words)


def test_where_all_openings_share_their_slits_there_is_nothing_to_tell() -> None:
    assert geometry_of(archive(cuts=None)) is None
    assert geometry_lines({"geometry": None}) == []


def test_two_slits_have_no_residual_that_should_vanish() -> None:
    visits = no_visits(PLAN)

    assert geometry_after(visits, replace(PLAN, slits=2), Settled("", {}), CUTS) is None


def test_nothing_is_told_while_a_run_is_blinded() -> None:
    assert Blinding("blinded").hides
    assert geometry_of(archive(blinding="blinded")) is None


def test_a_run_too_short_for_an_error_bar_tells_nothing() -> None:
    first = archive().isel(row=slice(0, 168))

    assert geometry_of(first) is None


def test_a_walk_moves_the_ends_of_a_stand_more_than_its_middle() -> None:
    visits = no_visits(PLAN)
    visits.used[0] = True
    visits.middle_s[:] = np.arange(len(PLAN.stand)) * 3.0

    moved = wander_s(visits, PLAN)

    walk = np.cumsum(np.random.default_rng(2).normal(0, np.sqrt(3.0), (20_000, 8)), axis=1)
    square = np.mean((walk - walk.mean(axis=1, keepdims=True)) ** 2, axis=0)
    # the mean of 20 000 squares of normal numbers: one in a hundred is its standard error
    assert moved[PLAN.position[:8], PLAN.opening[:8]] == pytest.approx(square, rel=0.05)
    assert np.count_nonzero(moved) == 8


def test_kappa_agrees_with_and_without_where_the_cuts_are_the_same() -> None:
    found = geometry_of(archive())

    assert isinstance(found, Geometry) and found.joint_kappa is not None and found.joint_se is not None
    assert abs(found.kappa - found.kappa_before) < 4 * found.kappa_se
    assert abs(found.joint_kappa) < 4 * found.joint_se and not found.differ
    assert found.interval_95 is not None and found.interval_95[0] < found.kappa < found.interval_95[1]
    assert found.limit_95 is not None and abs(found.kappa) + found.kappa_se < found.limit_95
    assert found.limit_95 < max(map(abs, found.interval_95))
