from __future__ import annotations

import numpy as np
import pytest

from daq.estimate import pool
from daq.estimate.pooling import leave_one_out

VALUES, SES, DOFS = [1.2, -0.4, 2.6, 0.3, -1.1], [0.9, 1.1, 1.0, 0.8, 1.4], [18.0] * 5


def test_weights_from_counts_weigh_and_the_bars_propagate() -> None:
    weights = np.array([1.0, 1.0, 2.0, 1.0, 1.0])

    found = pool(VALUES, SES, DOFS, weights)

    shares = weights / 6
    assert found.value == pytest.approx(shares @ VALUES)
    assert found.se == pytest.approx(np.sqrt(np.sum((shares * SES) ** 2)))


def test_nights_of_equal_weight_have_the_degrees_of_freedom_of_all_of_them() -> None:
    assert pool([1.0, 2.0, 3.0], [1.0] * 3, [10.0] * 3).dof == pytest.approx(30.0)


def test_nights_that_agree_too_well_have_no_scatter_between_them() -> None:
    found = pool([1.0, 1.0, 1.0], [0.5, 1.0, 0.7], [9.0] * 3)

    assert (found.q, found.tau, found.i2) == (0.0, 0.0, 0.0)
    assert found.random_value == pytest.approx(found.value)


def test_two_nights_have_no_random_effects_interval() -> None:
    assert pool([0.0, 5.0], [1.0, 1.0], [9.0, 9.0]).random_interval_95 is None


def test_known_errors_make_the_welch_test_the_chi_squared_one() -> None:
    found = pool(VALUES, SES, [np.inf] * 5)

    assert found.welch_p == pytest.approx(found.q_p, rel=1e-12)


def test_a_shared_cause_widens_the_bar_of_given_weights_too() -> None:
    found = pool(VALUES, SES, DOFS, weights=[1.0] * 5, common=[[0.6] * 5])

    assert found.se**2 == pytest.approx(pool(VALUES, SES, DOFS, weights=[1.0] * 5).se ** 2 + 0.36)


def test_the_headline_of_count_weights_covers_as_it_says() -> None:
    generator = np.random.default_rng(21)
    nights, campaigns, pairs = 5, 2000, 10
    sigma = np.exp(np.linspace(-0.5, 0.5, nights))
    covered = 0
    for _ in range(campaigns):
        blocks = generator.normal(0.0, sigma[:, None] * np.sqrt(pairs), (nights, pairs))
        found = pool(
            blocks.mean(axis=1),
            blocks.std(axis=1, ddof=1) / np.sqrt(pairs),
            [pairs - 1.0] * nights,
            sigma**-2,
        )
        covered += found.interval_95[0] <= 0 <= found.interval_95[1]

    # Standard error 0.49 %: four of them.
    assert covered / campaigns == pytest.approx(0.95, abs=0.0195)


@pytest.mark.parametrize(
    ("values", "ses", "dofs", "words"),
    [
        ([1.0], [1.0], [1.0], "two nights or more"),
        ([1.0, 2.0], [1.0], [1.0, 1.0], "two nights or more"),
        ([1.0, 2.0], [1.0, 0.0], [1.0, 1.0], "above zero"),
        ([1.0, np.nan], [1.0, 1.0], [1.0, 1.0], "finite"),
    ],
)
def test_nights_that_cannot_be_pooled_are_refused(
    values: list[float], ses: list[float], dofs: list[float], words: str
) -> None:
    with pytest.raises(ValueError, match=words):
        pool(values, ses, dofs)


@pytest.mark.judges
@pytest.mark.parametrize("nights", [3, 9])
def test_an_independent_library_finds_the_same(nights: int) -> None:
    """statsmodels.stats.meta_analysis.combine_effects: fixed effect, Q, and Paule-Mandel with t."""
    judge = pytest.importorskip("statsmodels.stats.meta_analysis")
    generator = np.random.default_rng(nights)
    se = generator.uniform(0.5, 2.0, nights)
    value = generator.normal(0, np.sqrt(se**2 + 2.0))

    found = pool(value, se, np.full(nights, np.inf))
    theirs = judge.combine_effects(value, se**2, method_re="iterated", use_t=True)

    assert (found.value, found.se) == pytest.approx((theirs.mean_effect_fe, theirs.sd_eff_w_fe), rel=1e-10)
    assert found.q == pytest.approx(theirs.q, rel=1e-10)
    assert found.tau**2 == pytest.approx(theirs.tau2, rel=1e-6)
    assert (found.random_value, found.random_se) == pytest.approx(
        (theirs.mean_effect_re, theirs.sd_eff_w_re), rel=1e-6
    )


def test_a_night_that_is_odd_stands_out_alone() -> None:
    value, se = [0.0, 0.1, -0.1, 8.0, 0.05], [1.0] * 5

    found = leave_one_out(value, se, [18] * 5)

    assert [one.p < 0.05 for one in found] == [False, False, False, True, False]
    assert found[3].others == pytest.approx(0.0125)


def test_a_scatter_that_is_granted_makes_no_night_odd() -> None:
    value, se = [0.0, 0.1, -0.1, 8.0, 0.05], [1.0] * 5

    assert all(one.p > 0.05 for one in leave_one_out(value, se, [18] * 5, tau=4.0))
