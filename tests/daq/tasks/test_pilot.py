"""Pilot: what the source does is found from counts, and the plan takes it."""

from __future__ import annotations

import numpy as np
import pytest

from daq.errors import DaqError
from daq.itinerary import compose
from daq.tasks.contract import Taken
from daq.tasks.pilot import TASK, with_pilot
from tests.daq.tasks.made import drawn, reading, setting
from tests.examples import lantern, lantern_rig


def watched(per_sqrt_hour: float, seed: int) -> list[Taken]:
    random = np.random.default_rng(seed)
    asks = TASK.asks(setting(), ())
    walk = np.cumsum(random.standard_normal(len(asks))) * per_sqrt_hour / np.sqrt(3600)
    counts = random.poisson(3.6e5 * np.exp(walk))
    return [
        (ask, reading(ask, (int(n),), float(at)))
        for at, (ask, n) in enumerate(zip(asks, counts, strict=True))
    ]


def test_a_walk_comes_out_as_it_was_put_in() -> None:
    found = TASK.fit(setting(), watched(0.1, 1))

    # the walk of 100 s stands 10 to 1 above counting; 12 such stretches know its size to 1/sqrt(24), 20 %
    assert found.values["wander_100_s"] == pytest.approx(0.1 * np.sqrt(100 / 3600), rel=0.4)


def test_a_restless_source_asks_for_a_shorter_dwell_and_a_quiet_one_for_a_longer() -> None:
    restless, quiet = (TASK.fit(setting(), watched(walk, 2)) for walk in (0.1, 0.002))

    assert restless.values["best_dwell_s"] < quiet.values["best_dwell_s"]
    assert restless.verdict == "fail"
    assert quiet.verdict == "pass"


def test_the_planner_takes_what_a_pilot_saw() -> None:
    found = TASK.fit(setting(), watched(0.1, 2))
    free = lantern()
    free = free.model_copy(update={"itinerary": free.itinerary.model_copy(update={"dwell_s": None})})

    planned = compose(with_pilot(free, found.values["counts"], found.values["sample_s"]), lantern_rig())

    assert float(planned.dwell_s.mean()) == pytest.approx(found.values["best_dwell_s"])


def test_too_little_light_is_refused_with_a_sentence() -> None:
    known = setting()

    with pytest.raises(DaqError, match=r"drowns in counting.*then repeat"):
        TASK.fit(known, drawn(TASK.asks(known, ()), lambda ask: 20.0, np.random.default_rng(1)))
