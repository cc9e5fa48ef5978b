from __future__ import annotations

import pytest

from daq.service.shut import Shut


def shut(counts: list[float]) -> Shut:
    """Return what laps of two visits of ten seconds each counted with no slit open."""
    found = Shut()
    for lap, number in enumerate(counts):
        found.add(lap, number / 2, 10.0)
        found.add(lap, number / 2, 10.0)
    return found


def test_the_last_two_whole_laps_are_held_against_all_before() -> None:
    rates = shut([100, 140, 60, 400, 500, 7]).rates()

    assert rates is not None
    assert rates.last_hz == [20.0, 25.0]
    assert rates.before_hz == pytest.approx(5.0)
    assert rates.before_se_hz == pytest.approx(300**0.5 / 60)


def test_four_whole_laps_are_needed_and_the_one_under_way_does_not_count() -> None:
    assert shut([100] * 4).rates() is None
    assert shut([100] * 5).rates() is not None


def test_laps_without_live_time_tell_nothing() -> None:
    found = Shut()
    for lap in range(6):
        found.add(lap, 0.0, 0.0)

    assert found.rates() is None
