"""Drawing: windows are those of the drawing or refused, either way round."""

from __future__ import annotations

import numpy as np
import pytest

from daq.errors import DaqError
from daq.tasks.drawing import named, seen_windows

ERROR_MM = 0.06
DRAWN_MM = {"A": 2.0, "AB": 4.0, "B": 6.0, "AC": 8.0, "ABC": 10.0, "BC": 12.0, "C": 14.0, "key": 18.4}


def jittered(random: np.random.Generator) -> np.ndarray:
    """Return window centres of the drawing as a coarse scan would see them, the chip off altogether."""
    centres = np.array(list(DRAWN_MM.values())) + random.uniform(-0.3, 0.3)
    return centres + random.normal(0, 0.05, len(centres))


def test_a_chip_is_recognised_a_hundred_times_of_a_hundred() -> None:
    random = np.random.default_rng(1)

    assert all(list(named(jittered(random), DRAWN_MM, ERROR_MM)) == list(DRAWN_MM) for _ in range(100))


def test_a_mirrored_chip_is_refused_a_hundred_times_of_a_hundred() -> None:
    random = np.random.default_rng(2)

    for _ in range(100):
        with pytest.raises(DaqError, match="in the wrong way"):
            named(np.sort(20.0 - jittered(random)), DRAWN_MM, ERROR_MM)


def test_a_missing_window_is_refused_a_hundred_times_of_a_hundred() -> None:
    random = np.random.default_rng(3)

    for one in range(100):
        seen = np.delete(jittered(random), one % len(DRAWN_MM))
        with pytest.raises(DaqError, match="7 windows were seen where the drawing has 8"):
            named(seen, DRAWN_MM, ERROR_MM)


def test_a_chip_that_looks_alike_both_ways_is_refused() -> None:
    even = {name: at for name, at in DRAWN_MM.items() if name != "key"}

    with pytest.raises(DaqError, match=r"both ways round.*key window"):
        named(np.array(list(even.values())), even, ERROR_MM)


def test_no_window_at_all_is_a_sentence() -> None:
    with pytest.raises(DaqError, match="no window was seen"):
        named(np.array([]), DRAWN_MM, ERROR_MM)


def test_another_chip_is_refused() -> None:
    with pytest.raises(DaqError, match=r"off the drawing by 0\.5"):
        named(np.array([2.0, 4.0, 6.0, 9.0, 10.0, 12.0, 14.0, 18.4]), DRAWN_MM, ERROR_MM)


def test_windows_are_seen_half_a_step_beyond_their_bright_points() -> None:
    place = np.arange(0.0, 6.0, 0.5)
    rate = np.where((place >= 1) & (place <= 2) | (place >= 4), 100.0, 1.0)

    assert seen_windows(place, rate, 50.0) == [(0.75, 2.25), (3.75, 5.75)]
