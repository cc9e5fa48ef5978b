"""Numbers, times and units as a person reads them."""

from __future__ import annotations

import pytest
from hypothesis import given
from hypothesis import strategies as st

from dashboard.times import clock, day_and_clock, duration
from dashboard.words import MINUS, THIN, count, decimals_of, fixed, general, spelt, unit_of


def test_counts_carry_thin_spaces() -> None:
    assert count(12464) == f"12{THIN}464"


@pytest.mark.parametrize(
    ("value", "decimals", "plus", "text"),
    [
        (-0.34, 1, True, f"{MINUS}0.3"),
        (0.34, 1, True, "+0.3"),
        (0.34, 1, False, "0.3"),
        (-0.04, 1, True, "0.0"),
        (1234.5, 0, False, f"1{THIN}234"),
    ],
)
def test_a_sign_is_printed_only_where_a_digit_is(value: float, decimals: int, plus: bool, text: str) -> None:
    assert fixed(value, decimals, plus) == text


@pytest.mark.parametrize(
    ("error", "decimals"), [(1.37, 1), (0.83, 2), (12.3, 0), (140, 0), (0.1, 2), (0.0, 1)]
)
def test_an_error_bar_shows_two_significant_digits(error: float, decimals: int) -> None:
    assert decimals_of(error) == decimals


@pytest.mark.parametrize(
    ("error", "scale", "name"),
    [
        (1e-3, 1e-3, "thousandths (10⁻³)"),
        (1e-4, 1e-4, "ten-thousandths (10⁻⁴)"),
        (4e-4, 1e-4, "ten-thousandths (10⁻⁴)"),
        (6e-4, 1e-3, "thousandths (10⁻³)"),
        (2e-6, 1e-6, "millionths (10⁻⁶)"),
        (7.0, 1.0, "ones"),
    ],
)
def test_the_unit_is_the_power_of_ten_in_which_the_error_reads_as_about_one(
    error: float, scale: float, name: str
) -> None:
    unit, words = unit_of(error)

    assert unit == pytest.approx(scale)
    assert words == name


@given(st.floats(5.01e-7, 4.9))
def test_in_its_unit_an_error_lies_between_a_half_and_five(error: float) -> None:
    scale, _ = unit_of(error)

    assert 0.499 <= error / scale <= 5.001


@pytest.mark.parametrize(
    ("seconds", "text"),
    [(0, "0 s"), (119, "119 s"), (120, "2 min"), (3599, "1 h 0 min"), (23280, "6 h 28 min")],
)
def test_a_length_of_time_is_said_in_hours_and_minutes(seconds: float, text: str) -> None:
    assert duration(seconds) == text


@pytest.mark.parametrize(
    ("value", "text"),
    [
        (293.8806, "293.9"),
        (21.314, "21.31"),
        (-1.25, "−1.250"),
        (0.0123, "0.0123"),
        (101497.0, f"101{THIN}497"),
        (1.2e-7, "1.2 × 10⁻⁷"),
        (-3.4e-12, "−3.4 × 10⁻¹²"),
        (0.0, "0.000"),
    ],
)
def test_a_reading_has_about_four_digits_and_no_letter_e(value: float, text: str) -> None:
    assert general(value) == text


def test_small_counts_are_words() -> None:
    assert [spelt(n, "pair") for n in (0, 1, 2, 11)] == ["no pairs", "one pair", "two pairs", "11 pairs"]


def test_times_say_that_they_are_utc() -> None:
    assert clock("2026-12-02T06:37:09Z") == "06:37 UTC"
    assert clock("2026-12-02T06:37:09Z", seconds=True) == "06:37:09 UTC"
    assert day_and_clock("2026-12-02T06:37:09Z") == "2 December, 06:37 UTC"
