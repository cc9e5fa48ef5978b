from __future__ import annotations

from dataclasses import replace
from math import sqrt

import numpy as np
import pytest
from scipy import stats

from daq.estimate import Plan, Sums, estimate_sums, terms
from daq.estimate.arrays import FloatArray
from daq.estimate.contrast import order_terms
from daq.openings import names
from tests.daq.estimate.nights import plan, rates_hz


def centre_plan(slits: int, pairs: int = 12, **changes: object) -> Plan:
    """Return the plan of one position at the central maximum."""
    signs = {term: np.ones(1) for term in order_terms(slits) if len(term) == 2}
    one = plan(positions=1, laps=2 * pairs, dead_time_s=0.0)
    return replace(one, slits=slits, openings=np.arange(2**slits), signs=signs, **changes)  # type: ignore[arg-type]


def centre_rates(slits: int) -> FloatArray:
    """Return |S|^2 by opening."""
    return np.array([mask.bit_count() ** 2 for mask in range(2**slits)], float)


def drawn(of: Plan, rates: FloatArray, seed: int, pairs: int = 12) -> Sums:
    """Return Poisson sums of one live second a pair, position and opening."""
    value = np.random.default_rng(seed).poisson(rates, (pairs, *np.atleast_2d(rates).shape)).astype(float)
    return Sums(value, np.ones_like(value), value)


@pytest.mark.parametrize(("slits", "expected"), [(2, 1), (3, 4), (4, 11), (5, 26)])
def test_every_term_of_order_two_and_above_is_there(slits: int, expected: int) -> None:
    of = centre_plan(slits)

    found = estimate_sums(drawn(of, 1e4 * centre_rates(slits) + 1e3, 1), of).terms

    assert found is not None
    assert [term.name for term in found.terms] == list(order_terms(slits))
    assert len(found.terms) == expected


def test_each_term_is_the_weighted_mean_of_the_terms_by_position() -> None:
    of = plan(positions=3, laps=4, dead_time_s=0.0)
    sums = drawn(of, rates_hz(of.positions_mm), 2, pairs=2)

    found = estimate_sums(sums, of).terms

    rates = sums.value.mean(axis=0)
    by_position = terms({name: rates[:, mask] for mask, name in enumerate(names(3))}, 3)
    assert found is not None
    for term in found.terms:
        assert term.epsilon == pytest.approx(np.average(by_position[term.name], weights=of.weights))


def test_the_term_of_highest_order_is_the_headline() -> None:
    of = centre_plan(4)

    whole = estimate_sums(drawn(of, 1e4 * centre_rates(4) + 1e3, 3), of)

    assert whole.terms is not None
    last = whole.terms.terms[-1]
    assert (last.kappa, last.kappa_se) == pytest.approx((whole.kappa, whole.kappa_se), rel=1e-12)
    assert last.kappa_counting_se == pytest.approx(whole.kappa_counting_se, rel=1e-12)
    assert (last.epsilon_se, last.delta_se) == pytest.approx((whole.epsilon_se, whole.delta_se), rel=1e-12)


def test_a_pairwise_term_has_no_kappa_and_a_weak_one_is_not_printed() -> None:
    of = centre_plan(3)
    weak = np.array([1e4, 2e4, 2e4, 3.01e4, 2e4, 3.01e4, 3.01e4, 4.03e4])

    found = estimate_sums(drawn(of, weak, 4), of).terms

    assert found is not None
    assert [term.kappa is None for term in found.terms] == [True, True, True, False]
    assert not found.terms[-1].printable
    assert found.terms[-1].delta < 6 * found.terms[-1].delta_se


def test_the_counting_covariance_of_four_slits_at_the_centre() -> None:
    """Expected: cov(I_S, I_T) = (-1)^(|S|+|T|) sum over U in S and T of var(P_U)."""
    of = centre_plan(4)
    rates = centre_rates(4)
    sums = Sums(np.tile(rates, (2, 1, 1)), np.ones((2, 1, 16)), np.tile(rates, (2, 1, 1)))

    found = estimate_sums(sums, of).terms

    assert found is not None
    high = [at for at, term in enumerate(found.terms) if term.order > 2]
    expected = np.full((5, 5), 6.0) + 18.0 * np.eye(5)
    expected[4, :], expected[:, 4], expected[4, 4] = -24.0, -24.0, 80.0
    order = [[term.name for term in found.terms].index(name) for name in ("ABC", "ABD", "ACD", "BCD", "ABCD")]
    assert sorted(order) == sorted(high)
    # Two pairs of a second each: half the variance of one.
    assert found.counting_covariance[np.ix_(order, order)] == pytest.approx(expected / 2, rel=1e-12)


def test_terms_scatter_as_their_covariance_says() -> None:
    of, nights = centre_plan(4, pairs=8), 400
    drawn_terms = []
    covariances = []
    for night in range(nights):
        found = estimate_sums(drawn(of, 400 * centre_rates(4) + 400, 100 + night, pairs=8), of).terms
        assert found is not None and found.covariance is not None
        drawn_terms.append([term.epsilon for term in found.terms])
        covariances.append(found.covariance)

    spread, told = np.cov(np.array(drawn_terms).T), np.mean(covariances, axis=0)
    scale = np.sqrt(np.outer(np.diag(told), np.diag(told)))
    # A covariance of 400 nights has an error of sqrt(2/400) of its scale: 4.5 of them for 121 entries.
    assert np.abs(spread - told).max() < 4.5 * sqrt(2 / nights) * scale.max()
    assert (np.abs(spread - told) / scale).max() < 4.5 * sqrt(2 / nights)


@pytest.mark.parametrize(("slits", "dof"), [(3, 1), (4, 5), (5, 16)])
def test_the_joint_test_has_one_degree_of_freedom_a_term(slits: int, dof: int) -> None:
    of = centre_plan(slits, pairs=20)

    found = estimate_sums(drawn(of, 1e4 * centre_rates(slits) + 1e3, 5, pairs=20), of).terms

    assert found is not None and found.joint is not None
    assert found.joint.dof == dof
    assert found.joint.f_p is not None


def test_the_joint_test_of_one_term_is_its_t() -> None:
    of = centre_plan(3)

    found = estimate_sums(drawn(of, 1e4 * centre_rates(3) + 1e3, 6), of).terms

    assert found is not None and found.joint is not None
    last = found.terms[-1]
    t = last.epsilon / (last.epsilon_se or 0.0)
    assert found.joint.f == pytest.approx(t**2)
    assert found.joint.f_p == pytest.approx(2 * stats.t.sf(abs(t), 11))
    assert found.joint.largest == "ABC"
    assert found.joint.largest_p == pytest.approx(found.joint.f_p)


def test_the_joint_test_rejects_as_often_as_it_says() -> None:
    of, nights = centre_plan(4, pairs=12), 600
    f_p, largest_p, chi2_p = [], [], []
    for night in range(nights):
        joint_of = estimate_sums(drawn(of, 400 * centre_rates(4) + 400, 900 + night), of).terms
        assert joint_of is not None and joint_of.joint is not None
        f_p.append(joint_of.joint.f_p)
        largest_p.append(joint_of.joint.largest_p)
        chi2_p.append(joint_of.joint.chi2_p)

    # Standard error of a share of 5 % in 600 nights: 0.9 %; four of them. Sidak's bound holds at most.
    margin = 4 * sqrt(0.05 * 0.95 / nights)
    assert np.mean(np.array(f_p) < 0.05) == pytest.approx(0.05, abs=margin)
    assert np.mean(np.array(chi2_p) < 0.05) == pytest.approx(0.05, abs=margin)
    assert np.mean(np.array(largest_p) < 0.05) < 0.05 + margin


def test_the_joint_test_finds_a_term_that_is_there() -> None:
    of = centre_plan(4)
    rates = 1e5 * centre_rates(4) + 1e3
    rates[0b0111] += 3e3  # the opening ABC: ABC and ABCD alone

    found = estimate_sums(drawn(of, rates, 8), of).terms

    assert found is not None and found.joint is not None
    assert found.joint.largest == "ABC"
    assert found.joint.chi2_p < 1e-6 and (found.joint.largest_p or 1.0) < 1e-3


def test_the_central_normalisation_divides_by_the_fullest_opening_of_each_term() -> None:
    of = replace(plan(positions=3, laps=4, dead_time_s=0.0), normalisation="central")
    sums = drawn(of, rates_hz(of.positions_mm), 9, pairs=2)

    found = estimate_sums(sums, of).terms

    rates = sums.value.mean(axis=0)
    assert found is not None
    assert found.terms[0].delta == pytest.approx((rates[:, 0b011] - rates[:, 0]).max())
    assert found.terms[-1].delta == pytest.approx((rates[:, 0b111] - rates[:, 0]).max())
