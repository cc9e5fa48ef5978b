"""Crosstalk: memory, direction and light far out, from readings of a known truth; quiet benches pass."""

from __future__ import annotations

import numpy as np
import pytest

from daq import openings
from daq.errors import DaqError
from daq.estimate import kappa
from daq.estimate.arrays import FloatArray
from daq.itinerary import compose, expected_rates
from daq.tasks.contract import Outcome, Taken
from daq.tasks.crosstalk import FAR, STANDS, TASK
from tests.daq.tasks.made import reading, setting

KNOWN = setting()
ASKS = TASK.asks(KNOWN, ())
PLACE = list(KNOWN.measurement.positions.places_mm).index(KNOWN.yardstick.position_mm)
BRIGHT = dict(
    zip(KNOWN.rig.opening_masks, expected_rates(KNOWN.measurement, KNOWN.rig)[PLACE].tolist(), strict=True)
)


def far_hz(position_mm: float, opening: int) -> float:
    """Return the Fraunhofer light of a 40 um slit alone 1.2 m away, 532 nm, about its own middle."""
    if not opening:
        return 800.0
    (slit,) = KNOWN.rig.slits_of(opening).values()
    angle = np.arctan((position_mm - 1e3 * slit.centre_m) * 1e-3 / 1.2)
    return float(800.0 + 40e3 * np.sinc(40e-6 * np.sin(angle) / 532e-9) ** 2)


def measured(seed: int, share: float = 0.0, back: float = 0.0, leak_hz: float = 0.0) -> Outcome:
    """Return the outcome with a memory, AC dimmer on the way back, and light that leaks beside B."""
    random = np.random.default_rng(seed)
    walk = np.cumsum(random.standard_normal(len(ASKS))) * 0.01 / np.sqrt(3600 / 3.0)
    found: list[Taken] = []
    before = BRIGHT[ASKS[0].opening]
    for at, ask in enumerate(ASKS):
        if ask.role == FAR:
            true_hz = far_hz(ask.position_mm, ask.opening) + leak_hz * (ask.opening == 2)
        else:
            odd = back * (ask.opening == 5) * (int(ask.role) % 2)
            true_hz = BRIGHT[ask.opening] * (1 - odd)
        rate_hz = true_hz + share * (before - true_hz)
        before = true_hz
        seen_hz = rate_hz * np.exp(walk[at] - 0.03 * at * 3.0 / 3600)
        seen_hz /= 1 + 40e-9 * seen_hz
        found.append((ask, reading(ask, (int(random.poisson(seen_hz * ask.dwell_s)),), 3.0 * at)))
    return TASK.fit(KNOWN, found)


def test_a_memory_is_found_within_its_errors_and_scatters_as_it_says() -> None:
    truth = 1e-3

    found = [measured(seed, share=truth) for seed in range(60)]

    pulls = np.array([(one.values["memory"] - truth) / one.se["memory"] for one in found])
    assert abs(pulls.mean()) < 4 / np.sqrt(60)
    assert abs(pulls.std(ddof=1) - 1) < 4 / np.sqrt(2 * 60)


def test_the_error_of_the_memory_is_that_of_counting() -> None:
    found = measured(1)
    rates = np.array([BRIGHT[mask] for mask in KNOWN.rig.opening_masks])
    order = [ask.opening for ask in ASKS[:8]]
    steps = np.diff([BRIGHT[mask] for mask in order])

    # what before and after differ by, there and back, about its mean: half of the step between neighbours
    there = dict(zip(order[1:], -steps, strict=True)) | {order[0]: 0.0}
    back = dict(zip(order[:-1], steps, strict=True)) | {order[-1]: 0.0}
    apart = np.array([(there[mask] - back[mask]) / 2 for mask in KNOWN.rig.opening_masks])
    said = 1 / np.sqrt(STANDS * 2.0 * np.sum(apart**2 / rates))
    assert found.chi2 is not None and found.dof is not None
    wider = np.sqrt(max(found.chi2 / found.dof, 1.0))
    # dead time takes up to 1.4 % of the counts that the formula has
    assert found.se["memory"] / said == pytest.approx(wider, rel=0.014)


def test_a_quiet_bench_passes_nearly_always() -> None:
    found = [measured(seed) for seed in range(100, 140)]

    assert sum(one.verdict == "pass" for one in found) >= 38


def test_a_memory_that_moves_kappa_fails_and_a_direction_is_doubtful_and_named() -> None:
    assert measured(1, share=5e-3).verdict == "fail"

    found = measured(2, back=4e-3)

    assert found.verdict == "doubtful"
    assert "the direction (" in found.sentence
    assert "AC is off most there and back" in found.sentence


def test_light_that_leaks_far_out_is_doubtful_and_its_slit_named() -> None:
    found = measured(3, leak_hz=60.0)

    assert found.verdict == "doubtful"
    assert "of the slits alone, far out, B is off most" in found.sentence


def test_the_yardstick_of_memory_is_what_a_memory_does_to_kappa() -> None:
    plan, share = compose(KNOWN.measurement, KNOWN.rig), 1e-4
    place, column = plan.position_index, plan.opening_index
    rates = plan.rates_hz
    total, visits = np.zeros((2, *rates.shape))
    for at in range(1, len(plan)):
        here, before = (place[at], column[at]), (place[at - 1], column[at - 1])
        total[here] += rates[here] + share * (rates[before] - rates[here])
        visits[here] += 1
    seen = total / visits

    def of(table: FloatArray) -> float:
        names = [openings.name(int(mask)) for mask in plan.openings]
        patterns = {name: table[:, at] for at, name in enumerate(names)}
        return kappa(patterns, patterns, plan.weights, plan.signs)[0]

    assert of(seen) - of(rates) == pytest.approx(share * KNOWN.yardstick.per_memory, rel=1e-2)


def test_without_light_nothing_is_fitted() -> None:
    dark = [(ask, reading(ask, (1600,), 3.0 * at)) for at, ask in enumerate(ASKS)]

    with pytest.raises(DaqError, match=r"800 a second were counted where 3\.61e\+05 are described"):
        TASK.fit(KNOWN, dark)
