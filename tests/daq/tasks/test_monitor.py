"""Monitor: what it sees of the mask is found, and a monitor that sees nothing is seldom blamed."""

from __future__ import annotations

import numpy as np
import pytest

from daq.tasks.contract import Outcome, Taken
from daq.tasks.monitor import TASK, exponent
from tests.contracts.rigs import sliced
from tests.daq.tasks.made import reading, setting
from tests.examples import lantern

KNOWN = setting(lantern(estimate__monitor_channel=1), sliced())


def watched(random: np.random.Generator, seen: float = 0.0) -> Outcome:
    """Return the outcome with a monitor of 2e6 counts a visit that loses a share when ABC is open."""
    asks = TASK.asks(KNOWN, ())
    walk = np.cumsum(random.standard_normal(len(asks))) * 0.01 / np.sqrt(3600 / 3.0)
    found: list[Taken] = []
    for at, ask in enumerate(asks):
        mean = 2e6 * np.exp(walk[at]) * (1 - seen * (ask.opening == 7))
        found.append((ask, reading(ask, (1000, int(random.poisson(mean))), 3.0 * at)))
    return TASK.fit(KNOWN, found)


def test_a_monitor_that_sees_the_mask_fails_and_the_opening_is_named() -> None:
    found = watched(np.random.default_rng(1), seen=2e-3)

    assert found.verdict == "fail"
    assert "something of the mask" in found.sentence
    assert "most at ABC" in found.sentence


def test_a_monitor_that_sees_nothing_is_blamed_seldom_and_never_believed_beyond_its_counts() -> None:
    random = np.random.default_rng(2)

    found = [watched(random) for _ in range(60)]

    assert sum(one.verdict == "fail" for one in found) <= 3
    assert all("divide by the mean of a stand" in one.sentence for one in found)


def test_without_a_monitor_the_task_says_what_it_lacks() -> None:
    assert "names no monitor" in " ".join(TASK.lacks(setting()))


@pytest.mark.parametrize(("monitor", "theory"), [(0.3, 0.917), (1.0, 0.5), (3.0, 0.1)])
def test_the_exponent_leaves_the_least_noise(monitor: float, theory: float) -> None:
    random = np.random.default_rng(3)
    source = random.standard_normal(100_000)
    seen = source + monitor * random.standard_normal(100_000)

    best = min(np.linspace(0, 1, 101), key=lambda power: float(np.var(source - power * seen)))

    assert exponent(1.0, monitor**2) == pytest.approx(theory, abs=1e-3)
    assert best == pytest.approx(exponent(1.0, monitor**2), abs=0.02)
