"""Monitor: what it sees of the mask is found, and a monitor that sees nothing is seldom blamed."""

from __future__ import annotations

import numpy as np
import pytest

from daq.description.by_hand import ByHand
from daq.tasks.contract import Outcome, Setting, Taken
from daq.tasks.monitor import TASK, exponent
from tests.contracts.rigs import sliced
from tests.daq.tasks.made import reading, setting
from tests.examples import lantern

KNOWN = setting(lantern(estimate__monitor_channel=1), sliced())


def watched(
    random: np.random.Generator, seen: float = 0.0, bends: float = 0.0, known: Setting = KNOWN
) -> Outcome:
    """Return the outcome with a monitor of 2e6 counts a visit that loses a share at ABC, and bends."""
    asks = TASK.asks(known, ())
    walk = np.cumsum(random.standard_normal(len(asks))) * 0.01 / np.sqrt(3600 / 3.0)
    found: list[Taken] = []
    passed = 1.0
    for at, ask in enumerate(asks):
        passed = passed if ask.turn is None else ask.turn.value
        light = passed * np.exp(walk[at])
        mean = 2e6 * light * (1 + bends * light) * (1 - seen * (ask.opening == 7))
        counts = random.poisson(1e6 * light), random.poisson(mean)
        found.append((ask, reading(ask, (int(counts[0]), int(counts[1])), 3.0 * at)))
    return TASK.fit(known, found)


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


def test_a_monitor_that_bends_is_found_within_its_errors() -> None:
    random = np.random.default_rng(4)

    found = [watched(random, bends=0.01) for _ in range(40)]

    # 1 + b x against exp(b x): the slope of the log lies up to b^2 / 2 below b; the detector's dead time of
    # 40 ns, which the readings do not have, takes 1e6 / 5 s of them to be 0.8 % more than they are
    pulls = [(one.values["bend"] - 0.010 + 0.008) / one.se["bend"] for one in found]
    assert abs(np.mean(pulls)) < 4 / np.sqrt(40) + 0.1
    assert abs(np.std(pulls, ddof=1) - 1) < 4 / np.sqrt(2 * 40)


def test_a_monitor_that_bends_much_is_doubtful_and_without_attenuators_nothing_is_said_of_it() -> None:
    assert watched(np.random.default_rng(5), bends=0.2).verdict == "doubtful"

    bare = setting(lantern(estimate__monitor_channel=1), sliced().model_copy(update={"by_hand": ByHand()}))
    found = watched(np.random.default_rng(6), known=bare)

    assert all(ask.turn is None for ask in TASK.asks(bare, ()))
    assert found.values["bend"] is None
    assert "names no attenuators" in found.sentence
