"""Counting statistics: dispersion, and the chi-squared tests behind the quality rules."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from daq.estimate.quality import Spread, dispersion, fingerprint


def test_the_index_of_dispersion_of_twenty_counts() -> None:
    """Data in the style of "Radiation Detection and Measurement", table 3.1, from memory; results recomputed.

    Mean 8.8, chi-squared about it 16.727, probability 0.608; the book divides by N and quotes 15.89.
    """
    counts = [8, 5, 12, 10, 13, 7, 9, 10, 6, 11, 14, 8, 8, 3, 9, 12, 6, 10, 8, 7]

    found = dispersion(counts, least=0)

    assert (np.mean(counts), np.var(counts)) == pytest.approx((8.8, 7.36))
    assert found.chi2 == pytest.approx(16.727272727, abs=1e-8)
    assert found.dof == 19
    assert found.beyond(0.608338539) and not found.beyond(0.608338537)


def test_deaths_by_horse_kick() -> None:
    """Two hundred corps-years with 0 to 4 deaths, 109, 65, 22, 3, 1 of them (1898, from memory): mean 0.61.

    The variance over the mean is 1.0016, as near to Poisson as data come.
    """
    deaths = np.repeat(np.arange(5), [109, 65, 22, 3, 1])

    found = dispersion(deaths.tolist(), least=0)

    assert deaths.mean() == pytest.approx(0.61)
    assert found.chi2 / found.dof == pytest.approx(0.6109547738693468 / 0.61, rel=1e-12)


@pytest.mark.parametrize(("dof", "p", "chi2"), [(9, 8e-6, 39.9), (7, 6.4e-5, 30.9), (7, 1 / 380, 21.9)])
def test_the_thresholds_of_the_rules(dof: int, p: float, chi2: float) -> None:
    """Derived: chi-squared quantiles to the digit given."""
    assert stats.chi2.isf(p, dof) == pytest.approx(chi2, abs=0.06)
    assert Spread(chi2 + 0.1, dof).beyond(p) and not Spread(chi2 - 0.1, dof).beyond(p)


def test_the_median_by_which_a_night_scales_its_dispersion() -> None:
    """Derived: the median of chi-squared with nine degrees of freedom is 8.343."""
    assert Spread(8.343, 9).ratio == pytest.approx(1.0, abs=1e-4)


def test_a_table_of_two_rows() -> None:
    """Common practice, by hand: chi-squared (ad - bc)^2 N / (product of the four sums)."""
    found = fingerprint([10, 20], [1.0, 1.0], [30, 40], [1.0, 1.0])

    assert found.chi2 == pytest.approx((10 * 40 - 20 * 30) ** 2 * 100 / (30 * 70 * 40 * 60))
    assert found.dof == 1


@pytest.mark.parametrize(
    ("seen", "mean", "variance", "chi2"),
    [
        ([57, 203, 383, 525, 532, 408, 273, 139, 45, 27, 10, 4, 0, 1, 1], 3.8715, 3.6948, 2488.918),
        ([0, 20, 43, 53, 86, 70, 54, 37, 18, 10, 5, 2, 2], 4.68, 4.4576, 380.991),
    ],
    ids=["alpha particles", "cells on squares"],
)
def test_counts_in_print_that_are_those_of_an_even_rate(
    seen: list[int], mean: float, variance: float, chi2: float
) -> None:
    """How often 0, 1, 2 ... was counted; frequencies from memory, which their printed means confirm.

    2608 times an eighth of a minute: "The probability variations in the distribution of alpha particles",
    Phil. Mag. 20, 698 (1910), mean 3.87. 400 squares: "On the error of counting with a haemacytometer",
    Biometrika 5, 351 (1907), set IV, mean 4.68. Variances and chi-squared recomputed.
    """
    counts = np.repeat(np.arange(len(seen)), seen)

    found = dispersion(counts.tolist(), least=0)

    assert (counts.mean(), counts.var()) == pytest.approx((mean, variance), abs=5.1e-5)
    assert found.chi2 == pytest.approx(chi2, abs=5.1e-4)
    assert found.dof == len(counts) - 1
    assert not found.beyond(1e-3)
