"""What a hidden offset moves, what it leaves alone, and what can be found out from what is shown."""

from __future__ import annotations

from dataclasses import replace
from math import sqrt
from typing import Any

import numpy as np
import pytest

from daq import openings
from daq.estimate import Blinding, Estimate, Plan, Running, Sums, estimate_run, estimate_sums, shown
from daq.estimate.arrays import FloatArray
from daq.estimate.contrast import contrast, epsilon_and_delta, order_terms
from daq.estimate.headline import headline
from daq.estimate.positions import leftover_by_pair
from daq.estimate.settle import told
from daq.estimate.shown import rounded, two_digits
from daq.estimate.tables import kappa_of, tables_of
from daq.estimate.veil import moved, veiled
from tests.daq.estimate.nights import dataset, plan, rates_hz, readings

OFFSET = -8.376414795499895e-4
HALFWIDTH = 1e-3
PAIRS = 19


def blinded(of: Plan, offset: float = OFFSET) -> Plan:
    return replace(of, blinding=Blinding("blinded", {"ABC": offset}))


def sums(of: Plan, live_s: float = 4.4, seed: int = 1) -> Sums:
    """Return a night of Poisson counts, every pair as long as the other."""
    true = np.broadcast_to(rates_hz(of.positions_mm) * live_s, (PAIRS, len(of.positions_mm), 8))
    counts = np.random.default_rng(seed).poisson(true).astype(float)
    return Sums(counts, np.full(counts.shape, live_s), counts)


def test_kappa_and_every_replicate_move_by_the_offset_to_the_last_digit() -> None:
    of, found = plan(), sums(plan())

    true, veil = tables_of(found), veiled(tables_of(found), blinded(of))

    everywhere = np.ones(len(of.positions_mm), bool)
    apart = kappa_of(veil.rates, everywhere, of) - kappa_of(true.rates, everywhere, of)
    assert apart == pytest.approx(OFFSET, abs=1e-15)
    without = kappa_of(veil.without, everywhere, of) - kappa_of(true.without, everywhere, of)
    assert without == pytest.approx(np.full(PAIRS, OFFSET), abs=1e-15)


@pytest.mark.parametrize("slits", [4, 5])
def test_every_term_of_order_three_and_above_moves_by_its_own_offset(slits: int) -> None:
    masks, rng = np.arange(2**slits), np.random.default_rng(2)
    what = contrast(tuple(masks.tolist()), slits)
    of = replace(
        plan(), slits=slits, openings=masks, positions_mm=np.zeros(1), weights=np.ones(1),
        signs={pair: np.ones(1) for pair in what.pair_names},
    )  # fmt: skip
    rates = np.array([[float(mask.bit_count() ** 2) + rng.uniform(0, 0.1) for mask in range(2**slits)]])
    high = [term for term in order_terms(slits) if len(term) > 2]
    offsets = dict(zip(high, rng.uniform(-1e-3, 1e-3, len(high)), strict=True))
    of = replace(of, blinding=Blinding("frozen", offsets))

    before, after = (
        told(tables_of(Sums(table[None], np.ones((1, *table.shape)), table[None])), 1, with_plan)["terms"]
        for table, with_plan in ((rates, replace(of, blinding=Blinding())), (rates, of))
    )

    for one, two in zip(before.terms, after.terms, strict=True):
        if one.order == 2:
            assert two.epsilon == pytest.approx(one.epsilon, abs=1e-12)
        else:
            assert two.kappa - one.kappa == pytest.approx(offsets[one.name], abs=1e-15)


def test_error_bar_and_what_is_left_by_position_stay_as_they_were() -> None:
    of, found = plan(), sums(plan())

    true, veil = (headline(veiled(tables_of(found), one), PAIRS, one) for one in (of, blinded(of)))
    before, after = (leftover_by_pair(found, one)[0] for one in (of, blinded(of)))

    assert veil["kappa_se"] == pytest.approx(true["kappa_se"], rel=1e-10)
    assert veil["interval_95"][1] - veil["interval_95"][0] == pytest.approx(
        true["interval_95"][1] - true["interval_95"][0], rel=1e-10
    )
    assert np.array_equal(before, after)


def test_only_the_pairwise_normalisation_can_be_blinded() -> None:
    with pytest.raises(ValueError, match="pairwise"):
        moved(np.ones((3, 8)), replace(blinded(plan()), normalisation="central"))


def hidden(found: Sums, of: Plan) -> Estimate:
    return shown(estimate_sums(found, of), of.blinding)


def test_what_is_shown_is_rounded_and_holds_no_rate_of_three_slits() -> None:
    of = blinded(plan())

    found = hidden(sums(of), of)

    assert found.kappa is not None and found.kappa_se is not None
    steps = found.kappa / (0.1 * found.kappa_se)
    assert steps == pytest.approx(round(steps), abs=1e-6)
    assert np.isnan(found.rates_hz[:, 7]).all() and np.isnan(found.rates_se_hz[:, 7]).all()
    assert np.isfinite(found.rates_hz[:, :7]).all()
    assert np.isnan(found.epsilon_hz).all() and np.isnan(found.epsilon_se_hz).all()
    assert (found.epsilon, found.epsilon_se, found.epsilon_counting_se, found.terms) == (None,) * 4
    for bar in ("kappa_se", "kappa_counting_se", "excess", "excess_se", "forecast_se"):
        assert getattr(found, bar) == two_digits(getattr(found, bar))


def test_an_open_run_is_shown_as_it_is() -> None:
    estimate = Running(plan()).estimate()

    assert shown(estimate, Blinding()) is estimate
    assert shown(estimate, Blinding("revealed", {"ABC": 1.0})) is estimate


def test_a_dataset_carries_its_blinding_to_the_estimate() -> None:
    of = plan()
    rows = readings(of, np.random.default_rng(3))
    data = dataset(of, rows)

    true = estimate_run(data)
    said = estimate_run(data.assign_attrs(blinding="blinded", hidden=Blinding("blinded", {"ABC": 0.5})))

    assert true.kappa is not None and said.kappa is not None and said.kappa_se is not None
    assert said.kappa == pytest.approx(true.kappa + 0.5, abs=0.06 * said.kappa_se)
    with pytest.raises(ValueError, match="secret that hides its kappa is not at hand"):
        estimate_run(data.assign_attrs(blinding="blinded"))


def test_the_running_estimate_and_its_history_are_hidden_too() -> None:
    of = plan(laps=20)
    rows = readings(of, np.random.default_rng(4))
    one, two = Running(of), Running(blinded(of, 0.5))
    for row in rows:
        one.add(row)
        two.add(row)

    true, said = one.history()["kappa"], two.history()["kappa"]

    highs = one.history()["interval_high"]
    bars = [
        high - at if high is not None and at is not None else None
        for high, at in zip(highs, true, strict=True)
    ]
    for a, b, bar in zip(true, said, bars, strict=True):
        assert (b is None) == (bar is None)  # without an error bar there is nothing to round by
        if b is not None and a is not None and bar is not None:
            assert b - a == pytest.approx(0.5, abs=0.06 * bar)
    assert two.estimate().epsilon is None


@pytest.mark.parametrize(
    ("value", "se", "expected"),
    [
        (0.0012345, 1e-4, 0.00123),
        (-1.26, 0.95, -1.235),
        (1.0, None, None),
        (None, 1.0, None),
        (1.0, 0.0, None),
    ],
)
def test_a_number_is_rounded_to_a_tenth_of_its_error(
    value: float | None, se: float | None, expected: float | None
) -> None:
    assert rounded(value, se) == (None if expected is None else pytest.approx(expected))


# Attacks. Each works on numbers as an estimate without this module would give them, and not on what is shown.


def alone(live_s: float = 4.4) -> tuple[Plan, Sums]:
    """Return a night at one position: the easiest to break."""
    of = blinded(plan(positions=1))
    return of, sums(of, live_s)


def others(found: Sums, upto: int) -> tuple[FloatArray, float]:
    """Return rates of the seven openings that are shown, and the exposure, after so many pairs."""
    return found.value[:upto].sum(axis=0)[0] / found.live[:upto].sum(axis=0)[0], float(
        found.live[:upto, 0, 7].sum()
    )


def from_integers(kappas: list[float], found: Sums) -> float:
    """Return the offset under which the counts of ABC after every pair are nearest to whole numbers."""
    whole = []
    for upto, kappa in enumerate(kappas, start=1):
        rates, live_s = others(found, upto)
        rates[7] = 0.0
        epsilon, delta = epsilon_and_delta(rates[None], contrast(tuple(range(8)), 3), "pairwise")
        whole.append(((kappa * delta - epsilon)[0] * live_s, delta[0] * live_s))
    shown_counts, slope = (np.array(column) for column in zip(*whole, strict=True))
    tried = np.linspace(-HALFWIDTH, HALFWIDTH, 400_001)
    near = np.zeros(len(tried))
    for count, per_offset in zip(shown_counts, slope, strict=True):
        near += np.cos(2 * np.pi * (count - tried * per_offset))
    return float(tried[np.argmax(near)])


def history(of: Plan, found: Sums) -> list[dict[str, Any]]:
    parts = [
        Sums(found.value[:n], found.live[:n], found.variance[:n]) for n in range(1, len(found.value) + 1)
    ]
    return [dict(headline(veiled(tables_of(part), of), n, of)) for n, part in enumerate(parts, start=1)]


def test_the_integer_attack_fails() -> None:
    of, found = alone(live_s=0.2)
    exact = [one["kappa"] for one in history(of, found)]
    se = history(of, found)[-1]["kappa_se"]
    said = [rounded(one["kappa"], one.get("kappa_se")) for one in history(of, found)]

    whole = from_integers(exact, found)
    later = Sums(found.value[1:], found.live[1:], found.variance[1:])
    guess = from_integers([kappa for kappa in said if kappa is not None], later)

    assert whole == pytest.approx(OFFSET, abs=2e-8)
    assert abs(guess - OFFSET) > 1e-5
    assert se > 0


def test_the_two_values_attack_fails() -> None:
    """A moved rate beside a bar that the true counts made gives the offset."""
    of, found = alone()
    table = tables_of(found)
    _, live_s = others(found, PAIRS)
    _, delta = epsilon_and_delta(table.rates, contrast(tuple(range(8)), 3), "pairwise")
    rate = moved(table.rates, of)[0, 7]

    by_true_bar = (rate - table.variances[0, 7] * live_s) / delta[0]
    by_shown_bar = (rate - veiled(table, of).variances[0, 7] * live_s) / delta[0]

    assert by_true_bar == pytest.approx(OFFSET, abs=1e-12)
    assert by_shown_bar == pytest.approx(0.0, abs=1e-12)
    assert np.isnan(hidden(found, of).rates_se_hz[:, 7]).all()


def kappas_of_bar(bars: tuple[float, float], found: Sums) -> FloatArray:
    """Return every kappa within the half width whose counting bar lies between two values."""
    rates, live_s = others(found, PAIRS)
    rates[7] = 0.0
    what = contrast(tuple(range(8)), 3)
    epsilon, delta = (column[0] for column in epsilon_and_delta(rates[None], what, "pairwise"))
    tried = np.linspace(-3 * HALFWIDTH, 3 * HALFWIDTH, 20_001)
    signs = np.sign(what.pairs @ rates)
    found_bars = []
    for kappa in tried:
        full = rates.copy()
        full[7] = kappa * delta - epsilon
        gradient = (what.residual - kappa * (signs @ what.pairs)) / delta
        found_bars.append(sqrt(float(gradient**2 @ (full / live_s))))
    inside = (np.array(found_bars) >= bars[0]) & (np.array(found_bars) <= bars[1])
    return np.asarray(tried[inside])


def test_the_counting_bar_attack_fails() -> None:
    of, found = alone()
    open_plan = replace(of, blinding=Blinding())
    true = estimate_sums(found, open_plan)
    assert true.kappa is not None and true.kappa_counting_se is not None
    five = float(f"{true.kappa_counting_se:.6e}")
    bar = hidden(found, of).kappa_counting_se
    assert bar is not None
    half_step = 0.5 * 10 ** (np.floor(np.log10(bar)) - 1)

    exact = kappas_of_bar((five * (1 - 1e-6), five * (1 + 1e-6)), found)
    guesses = kappas_of_bar((bar - half_step, bar + half_step), found)

    assert exact == pytest.approx(np.full(len(exact), true.kappa), abs=5e-5)
    assert len(exact) > 0
    assert np.ptp(guesses) > 2 * HALFWIDTH  # no wiser than before


def test_openings_of_two_slits_are_not_touched() -> None:
    of, found = blinded(plan()), sums(plan())

    rates = moved(tables_of(found).rates, of)

    low = [mask for mask in range(8) if len(openings.name(mask)) < 3 or mask == 0]
    assert np.array_equal(rates[:, low], tables_of(found).rates[:, low])
