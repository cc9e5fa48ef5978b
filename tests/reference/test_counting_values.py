"""Dead time and limits of few counts: values in print."""

from __future__ import annotations

from math import sqrt

import numpy as np
import pytest
from scipy.optimize import brentq

from daq.estimate import dead_time_two_source_s, poisson_interval, seen_rate_hz, true_rate_hz
from daq.estimate.counting import chance_of_more
from daq.tasks.crossings import dead_time_of_cycles
from daq.tasks.dark import ONE_SIDED_95, decision_and_limit


@pytest.mark.parametrize(
    ("counts", "low", "high"),
    [
        (0, 0.0, 3.6889),
        (1, 0.0253, 5.5716),
        (2, 0.2422, 7.2247),
        (3, 0.6187, 8.7673),
        (5, 1.6235, 11.6683),
        (10, 4.7954, 18.3904),
    ],
)
def test_limits_at_95_percent(counts: int, low: float, high: float) -> None:
    """From "Fiducial limits for the Poisson distribution", Biometrika 28, 437 (1936); from memory."""
    assert poisson_interval(counts, 0.95) == pytest.approx((low, high), abs=5e-5)


@pytest.mark.parametrize(
    ("counts", "low", "high"),
    [
        (0, 0.0, 1.841),
        (1, 0.173, 3.300),
        (2, 0.708, 4.638),
        (3, 1.367, 5.918),
        (4, 2.086, 7.163),
        (5, 2.840, 8.382),
        (10, 6.891, 14.27),
    ],
)
def test_limits_at_one_standard_deviation(counts: int, low: float, high: float) -> None:
    """From "Confidence limits for small numbers of events in astrophysical data".

    Astrophys. J. 303, 336 (1986), tables 1 and 2 at 0.8413 one-sided; table numbers from memory, recomputed.
    """
    found = poisson_interval(counts, 2 * 0.8413 - 1)

    assert found == pytest.approx((low, high), abs=5e-3 if counts == 10 else 1e-3)


@pytest.mark.parametrize(
    ("counts", "confidence", "high"),
    [(0, 0.90, 2.3026), (0, 0.95, 2.9957), (0, 0.99, 4.6052), (1, 0.95, 4.7439), (3, 0.90, 6.6808)],
)
def test_one_sided_upper_limits(counts: int, confidence: float, high: float) -> None:
    """Common practice, no source; for zero counts -ln(1 - confidence)."""
    assert poisson_interval(counts, 2 * confidence - 1)[1] == pytest.approx(high, abs=5e-5)


@pytest.mark.parametrize(
    ("kind", "seen"),
    [
        ("non-paralysable", [999.000999, 9900.99009901, 90909.09090909, 500000.0]),
        ("paralysable", [999.00049983, 9900.49833749, 90483.7418036, 367879.44117144]),
    ],
)
def test_both_models_of_dead_time(kind: str, seen: list[float]) -> None:
    """From "Radiation Detection and Measurement", 4th ed., ch. 4; from memory, recomputed."""
    true = [1e3, 1e4, 1e5, 1e6]

    found = [seen_rate_hz(rate, 1e-6, kind) for rate in true]

    assert found == pytest.approx(seen, rel=1e-9)
    # At 1e6 the paralysable rate has its maximum: there the inverse is flat and not asked for.
    assert true_rate_hz(found[:3], 1e-6, kind) == pytest.approx(true[:3], rel=1e-10)


def test_dead_time_from_two_sources() -> None:
    """From "Radiation Detection and Measurement", 4th ed., ch. 4, exact form with background.

    Numbers of a student laboratory sheet (2022), which prints 1.345e-4, and 1.497e-4 without background;
    a check of the formula only: the sheet feeds it net rates.
    """
    with_background = dead_time_two_source_s(823, 440, 1164, 13)
    without = dead_time_two_source_s(823, 440, 1164, 0)

    assert with_background == pytest.approx(0.00013454248886, rel=1e-6)
    assert without == pytest.approx(0.0001497456456, rel=1e-6)


@pytest.mark.parametrize(("background", "printed"), [(13, 1.345e-4), (0, 1.497e-4)])
def test_the_task_finds_the_dead_time_of_two_sources_too(background: float, printed: float) -> None:
    """The same sheet (2022), with background and without: every crossing counts what the sheet has."""
    rates = np.array([[[background, 823, 440, 1164]] * 4] * 2, float)

    found = dead_time_of_cycles(rates, "non-paralysable")

    assert found.tau_s == pytest.approx(printed, abs=5.1e-8)


@pytest.mark.parametrize(("blank", "decision", "limit"), [(100, 23.26, 49.23), (25, 11.63, 25.97)])
def test_the_decision_threshold_and_detection_limit_of_a_paired_blank(
    blank: float, decision: float, limit: float
) -> None:
    """From "Limits for qualitative detection and quantitative determination", Anal. Chem. 40, 586 (1968).

    2.33 sqrt(B) and 2.71 + 4.65 sqrt(B); the forms from memory, digits with 2.326 and 4.652 recomputed.
    """
    assert decision_and_limit(blank, 1.0, 1.0) == pytest.approx((decision, limit), abs=0.011)


@pytest.mark.parametrize(("dark_hz", "dark_s", "closed_s"), [(50.0, 500.0, 500.0), (0.5, 3600.0, 600.0)])
def test_the_detection_limit_solves_the_implicit_definition_of_the_standard(
    dark_hz: float, dark_s: float, closed_s: float
) -> None:
    """ISO 11929-1:2019, y# = y* + k u(y#) and y* = k u(0) for gross and background counts; from memory."""
    decision, limit = decision_and_limit(dark_hz, dark_s, closed_s)

    def u(rate: float) -> float:
        return sqrt((rate + dark_hz) / closed_s + dark_hz / dark_s)

    assert decision == pytest.approx(ONE_SIDED_95 * u(0.0), rel=1e-12)
    solved = float(brentq(lambda rate: decision + ONE_SIDED_95 * u(rate) - rate, decision, 10 * limit))
    assert limit == pytest.approx(solved, rel=1e-9)


@pytest.mark.parametrize(
    ("dark", "counts", "chance"),
    [(0, 4, 0.0625), (0, 5, 0.03125), (1, 7, 0.03515625), (5, 13, 0.048126220703125)],
)
def test_the_fewest_counts_that_are_more_than_dark(dark: int, counts: int, chance: float) -> None:
    """From "Applied Modeling and Computations in Nuclear Science", ACS Symposium (2006), text of fig. 4.

    (0, 5) is the smallest pair that is detected at 5 %; the probabilities are those of a fair coin.
    """
    assert chance_of_more(counts, 1.0, dark, 1.0) == pytest.approx(chance, rel=1e-12)


def test_no_count_is_never_more_than_dark() -> None:
    """By definition."""
    assert chance_of_more(0, 1.0, 3, 1.0) == 1.0
