from typing import Any

import pytest

from daq.estimate.shift import Shift
from daq.estimate.watch import Watched, concerns

QUIET: dict[str, Any] = {
    "levels": [1.0] * 100,
    "hours": 3.0,
    "pairs": 10,
    "excess": 1.0,
    "stands_done": 100,
    "stands_left_out": 0,
    "stands_repeated": 0,
}


def kinds(**changes):
    return [found.kind for found in concerns(Watched(**QUIET | changes))]


def test_a_quiet_night_needs_nobody():
    assert kinds() == []


@pytest.mark.parametrize(("change", "word"), [(-0.06, "fell by 6.0 %"), (0.08, "rose by 8.0 %")])
def test_a_source_that_changes_is_told_with_its_figure_and_that_kappa_is_good(change, word):
    levels = [1 + change * n / 99 for n in range(100)]
    levels[:10], levels[-10:] = [1.0] * 10, [1 + change] * 10

    (found,) = concerns(Watched(**QUIET | {"levels": levels}))

    assert word in found.what
    assert "kappa is still good" in found.good


@pytest.mark.parametrize(("sudden", "kinds_found"), [(True, ["level", "step"]), (False, ["level"])])
def test_a_step_is_a_note_of_its_own_and_a_slow_change_says_when_it_began(sudden, kinds_found):
    shift = Shift(size=-0.06, hours=1.25, sudden=sudden)
    levels = [1.0] * 50 + [0.94] * 50

    found = concerns(Watched(**QUIET | {"levels": levels, "shift": shift}))

    assert [one.kind for one in found] == kinds_found
    assert ("slow change began 1.2 hours" in found[0].what) != sudden


def test_a_change_below_five_percent_is_no_news():
    assert kinds(levels=[1.0] * 50 + [0.96] * 50) == []


def test_pairs_that_scatter_too_much_are_told_from_the_eighth_pair():
    assert kinds(excess=1.6) == ["excess"]
    assert kinds(excess=1.6, pairs=7) == []
    assert kinds(excess=None) == []


def test_many_stands_left_out_ask_for_a_person():
    assert kinds(stands_left_out=6) == ["left-out"]
    assert kinds(stands_left_out=5) == []


def test_repeated_stands_are_counted():
    (one,) = concerns(Watched(**QUIET | {"stands_repeated": 1}))
    (more,) = concerns(Watched(**QUIET | {"stands_repeated": 3}))

    assert one.what.startswith("One stand was repeated")
    assert more.what.startswith("3 stands were repeated")
