"""Said: numbers end where their errors begin."""

from __future__ import annotations

import pytest

from daq.tasks.said import of_allowed, with_error


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


def test_next_to_nothing_is_said_to_be_less_than_a_thousandth_of_what_is_allowed() -> None:
    assert of_allowed(0.0, 3e-5) == "less than 3e-08"
    assert of_allowed(1.2e-5, 3e-5) == "1.2e-05 of 3.0e-05 allowed"
