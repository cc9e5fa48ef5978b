"""Yardstick: what kappa answers to a defect of an opening, against kappa worked out anew."""

from __future__ import annotations

import numpy as np
import pytest

from daq import openings
from daq.estimate import kappa
from daq.itinerary import compose
from daq.tasks.yardstick import yardstick
from tests.examples import lantern, lantern_rig


@pytest.mark.parametrize("name", openings.names(3))
def test_the_load_of_an_opening_is_what_kappa_does_when_that_opening_loses_light(name: str) -> None:
    itinerary = compose(lantern(), lantern_rig())
    rates = dict(zip(openings.names(3), itinerary.rates_hz.T, strict=True))
    dimmed = rates | {name: rates[name] * (1 - 1e-5)}
    before, after = (kappa(one, one, itinerary.weights, itinerary.signs)[0] for one in (rates, dimmed))

    load = yardstick(lantern(), lantern_rig()).load[openings.mask(name)]

    assert (after - before) / -1e-5 == pytest.approx(load, rel=1e-3, abs=1e-5)


def test_independent_errors_of_all_openings_together_make_the_allowance() -> None:
    found = yardstick(lantern(), lantern_rig())
    draws = np.random.default_rng(3).standard_normal((20_000, 8)) * found.rate_error

    spread = float(np.std(draws @ np.array(list(found.load.values()))))

    assert spread == pytest.approx(found.allowed, rel=4 / np.sqrt(2 * 20_000))


def test_a_tighter_goal_allows_less() -> None:
    wide, tight = (yardstick(lantern(estimate__goal_se=goal), lantern_rig()) for goal in (1e-4, 1e-5))

    assert tight.rate_error == pytest.approx(wide.rate_error / 10)
