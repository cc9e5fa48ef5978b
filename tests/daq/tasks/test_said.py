"""Said: numbers end where their errors begin."""

from __future__ import annotations

import pytest

from daq.tasks.said import with_error


@pytest.mark.parametrize(
    ("value", "se", "text"),
    [
        (40.0312, 0.0691, "40.031 +- 0.069"),
        (41.13, 6.8, "41.1 +- 6.8"),
        (352.4, 71.0, "352 +- 71"),
        (12.0, 0.0, "12"),
        (12.0, float("nan"), "12"),
    ],
)
def test_a_number_is_written_to_the_second_digit_of_its_error(value: float, se: float, text: str) -> None:
    assert with_error(value, se) == text
