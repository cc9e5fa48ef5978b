"""Fringes: periods and middles as exact as two formulas say; a fringe that is not there is a sentence."""

from __future__ import annotations

import numpy as np
import pytest

from daq.errors import DaqError
from daq.tasks.fringes import fringes
from tests.daq.tasks.made import LOBE_MM, MIDDLE_MM, PERIODS_MM, fringe_sd_mm, pair_counts, scan_mm

WANTED_MM = {pair: 1.003 * period for pair, period in PERIODS_MM.items()}


@pytest.mark.parametrize(("visibility", "alone", "lobe_mm"), [(0.5, 60.0, 1e3), (0.9, 20_000.0, LOBE_MM)])
def test_period_and_middle_scatter_as_they_say_and_are_not_off(
    visibility: float, alone: float, lobe_mm: float
) -> None:
    random, draws = np.random.default_rng(1), 50
    rates = pair_counts(visibility, alone, lobe_mm, none=400.0)

    found = [
        fringes(scan_mm(), {name: random.poisson(one).astype(float) for name, one in rates.items()}, *known)
        for known in [(WANTED_MM, lobe_mm)] * draws
    ]

    bent = np.mean([np.sum((one.bent_mm / one.bent_se_mm) ** 2) for one in found])
    assert bent == pytest.approx(2.0, abs=4 * 2.0 / np.sqrt(draws))  # chi-squared of two, mean and spread 2
    for pair, period in PERIODS_MM.items():
        every = [one.by_pair[pair] for one in found]
        for values, se, truth in (
            ([one.period_mm for one in every], [one.period_se_mm for one in every], period),
            ([one.middle_mm for one in every], [one.middle_se_mm for one in every], MIDDLE_MM),
        ):
            said = float(np.sqrt(np.mean(np.square(se))))
            assert abs(np.mean(values) - truth) < 4 * said / np.sqrt(draws)
            assert np.std(values, ddof=1) == pytest.approx(said, rel=4 / np.sqrt(2 * draws))


@pytest.mark.parametrize("pair", PERIODS_MM)
@pytest.mark.parametrize("visibility", [0.5, 0.9])
@pytest.mark.parametrize("alone", [60.0, 6000.0])
def test_their_errors_are_those_of_the_two_formulas_to_an_eighth(
    pair: str, visibility: float, alone: float
) -> None:
    """An even light, amplitudes of slits alone that are found from the same scan; formulas have them known.

    The study `tasks` compares the scatter of counted scans with them.
    """
    counts = pair_counts(visibility, alone, 1e3)

    found = fringes(scan_mm(), counts, WANTED_MM, 1e3).by_pair[pair]

    period_sd, middle_sd = fringe_sd_mm(pair, counts, visibility)
    assert found.period_se_mm == pytest.approx(period_sd, rel=0.12)
    assert found.middle_se_mm == pytest.approx(middle_sd, rel=0.12)


def test_what_is_fitted_is_what_was_counted_of_slits_that_are_not_lit_alike_past_their_first_zeros() -> None:
    place = np.linspace(-30, 30, 181)
    counts = pair_counts(0.95, 50_000.0, LOBE_MM, none=300.0, place_mm=place, lit={"A": 0.7, "C": 1.2})

    found = fringes(place, counts, WANTED_MM, LOBE_MM)

    assert found.chi2 < 0.01 * found.dof
    for pair, period in PERIODS_MM.items():
        assert found.by_pair[pair].period_mm == pytest.approx(period, rel=1e-5)
        assert found.by_pair[pair].visibility == pytest.approx(0.95, abs=1e-4)


def test_light_without_a_fringe_is_refused_with_a_sentence() -> None:
    random = np.random.default_rng(3)
    counts = {
        name: random.poisson(one).astype(float) for name, one in pair_counts(0.0, 20_000.0, 1e3, 400).items()
    }

    with pytest.raises(DaqError, match=r"no fringe of about .* mm is seen behind .*does not converge"):
        fringes(scan_mm(), counts, WANTED_MM, 1e3)


def test_no_light_at_all_is_refused_with_a_sentence() -> None:
    counts = {name: np.full(len(scan_mm()), 400.0) for name in ("none", "A", "B", "C", "AB", "BC", "AC")}

    with pytest.raises(DaqError, match="no fringe of about"):
        fringes(scan_mm(), counts, WANTED_MM, 1e3)
