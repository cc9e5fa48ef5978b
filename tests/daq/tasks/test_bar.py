"""Bar: as long as the rate is part of the best one, and the numbers beside it."""

from __future__ import annotations

import pytest

from daq.ports import Counted
from daq.tasks.bar import bar, rate_line


@pytest.mark.parametrize(
    ("rate_hz", "best_hz", "filled"), [(0, 100, 0), (50, 100, 5), (100, 100, 10), (-3, 100, 0), (7, 0, 0)]
)
def test_a_bar_is_as_long_as_the_rate_is_part_of_the_best(
    rate_hz: float, best_hz: float, filled: int
) -> None:
    assert bar(rate_hz, best_hz, 10) == "#" * filled + "." * (10 - filled)


def test_a_line_says_rate_error_and_other_channels() -> None:
    line = rate_line(Counted(values=(400, 9000), live_s=0.5), best_hz=1600.0)

    assert "50 % of 1600/s" in line
    assert "800 +- 40/s" in line
    assert "1: 1.8e+04/s" in line


def test_a_line_fits_a_terminal_of_80_columns_and_says_overflow() -> None:
    line = rate_line(Counted(values=(4_294_967_295, 123_456), live_s=0.5, overflow=True), best_hz=8.6e9)

    assert len(line) <= 80 + len("  OVERFLOW")
    assert line.endswith("OVERFLOW")
