"""What the channels of a visit say: Poisson, Fano, power, heralded pairs, a monitor."""

from __future__ import annotations

from dataclasses import replace
from math import sqrt
from typing import Any

import numpy as np
import pytest

from daq.estimate import Sums, estimate_run, estimate_sums, plan_of_dataset, true_rate_hz
from daq.estimate.arrays import FloatArray
from daq.estimate.contrast import contrast
from daq.estimate.detected import Detected, detected
from daq.estimate.headline import headline
from daq.estimate.plan import Heralded, Plan
from daq.estimate.rows import Rows
from daq.estimate.tables import tables_of
from tests.daq.estimate.nights import dataset, plan, rates_hz, readings
from tests.daq.estimate.test_running import agree, run

PLAN = plan(positions=3, laps=6, dead_time_s=0.0)


def rows(values: Any, variances: Any = None, live_s: float = 2.0) -> Rows:
    """Return one row for every line of values by channel."""
    table = np.atleast_2d(np.asarray(values, float))
    spread = (
        np.full(table.shape, np.nan) if variances is None else np.atleast_2d(np.asarray(variances, float))
    )
    number = np.arange(len(table))
    live = np.full(len(table), live_s)
    middle_s = 3.0 * number.astype(float)
    return Rows(number, number * 0 + 1, number * 0, table, spread, live, middle_s)


def scatter(of: Plan, draws: FloatArray, live_s: float = 2.0) -> tuple[Detected, float, float]:
    """Return what many draws detect, the variance of the values and the mean of the variances told."""
    found = detected(rows(draws, live_s=live_s), of)
    return found, float(found.value.var()), float(found.variance.mean())


def test_poisson_counts_have_their_own_number_as_variance() -> None:
    found = detected(rows([[900.0], [0.0]]), PLAN)

    assert found.value.tolist() == found.variance.tolist() == [900.0, 0.0]


def test_a_fano_factor_widens_the_counting_bar_by_its_root() -> None:
    night = readings(PLAN, np.random.default_rng(1))

    wide, narrow = (
        estimate_run(dataset(replace(PLAN, fano=fano), night)).kappa_counting_se for fano in (2.25, 1.0)
    )

    assert wide is not None and narrow is not None
    assert wide == pytest.approx(1.5 * narrow)


def test_counts_with_a_fano_factor_scatter_as_told() -> None:
    """Every arrival brings one more with probability p = 0.2: variance over mean (1 + 3 p)/(1 + p)."""
    of = replace(PLAN, fano=1.6 / 1.2, dead_time_s=0.0)
    first = np.random.default_rng(2).poisson(5e3, 20_000)
    draws = (first + np.random.default_rng(3).binomial(first, 0.2)).astype(float)

    _, spread, told = scatter(of, draws[:, None])

    # The variance of 20 000 draws is known to 1 %: four of them.
    assert spread == pytest.approx(told, rel=0.04)


def test_power_is_a_mean_and_adds_up_by_the_time_it_was_taken() -> None:
    of = replace(PLAN, counting="power")

    found = detected(rows([[3e-6]], [[4e-14]], live_s=2.5), of)

    assert (found.value[0], found.variance[0]) == pytest.approx((7.5e-6, 2.5e-13), rel=1e-12, abs=0.0)


def test_power_below_zero_is_a_reading_like_any_other() -> None:
    found = detected(rows([[-1e-9], [np.nan]], [[1e-18], [1e-18]]), replace(PLAN, counting="power"))

    assert found.fine.tolist() == [True, False]


def powered(of: Plan, generator: np.random.Generator, repeats: int = 10) -> list[Any]:
    """Return readings of a power meter: the mean of some readings of 1 nW noise, its variance from them."""
    rates = rates_hz(of.positions_mm)[of.position, of.opening] * 1e-12
    found = []
    for row, power in zip(readings(of, generator), rates, strict=True):
        taken = power + generator.normal(0.0, 1e-9, repeats)
        mean, variance = float(taken.mean()), float(taken.var(ddof=1) / repeats)
        found.append(replace(row, values=(mean,), values_var=(variance,), repeats=repeats))
    return found


def test_the_bars_of_a_power_bench_come_from_repeats() -> None:
    of = replace(PLAN, counting="power")
    night = powered(of, np.random.default_rng(4))

    found = estimate_run(dataset(of, night))

    assert agree(run(of, night).estimate().to_json(), found.to_json())
    # Six visits of 1 nW / sqrt(10) each; a variance of 54 degrees of freedom is known to 19 %.
    assert found.rates_se_hz == pytest.approx(np.full((3, 8), 1e-9 / sqrt(60)), rel=0.8)
    assert np.mean(found.rates_se_hz**2) == pytest.approx(1e-18 / 60, rel=4 * sqrt(2 / 54 / 24))


def test_power_without_repeats_has_a_jackknife_and_no_counting_bar() -> None:
    of = replace(PLAN, counting="power")
    bare = [replace(row, values_var=None) for row in powered(of, np.random.default_rng(5))]

    found = estimate_run(dataset(of, bare)).to_json()

    assert found["kappa_se"] is not None
    assert found["kappa_counting_se"] is None and found["excess"] is None


HERALDED = replace(PLAN, heralded=Heralded(signal=1, idler=2, window_s=1e-6))


def pairs(
    generator: np.random.Generator, true: float, singles: tuple[float, float], live_s: float, number: int
) -> FloatArray:
    """Return coincidences and both singles of many visits: true pairs, lone photons, chance coincidences."""
    both = generator.poisson(true, number)
    lone = [generator.poisson(single, number) for single in singles]
    first, second = both + lone[0], both + lone[1]
    chance = generator.poisson(first * second * 1e-6 / live_s)
    return np.stack([both + chance, first, second], axis=1).astype(float)


def test_accidental_coincidences_are_taken_away() -> None:
    draws = pairs(np.random.default_rng(6), 500.0, (3e4, 4e4), 2.0, 20_000)

    found, spread, told = scatter(HERALDED, draws)

    assert draws[:, 0].mean() > 1100  # most coincidences are accidental here
    # 20 000 visits: the mean is known to its error, which is four of them; the variance to 1 %.
    assert found.value.mean() == pytest.approx(500.0, abs=4 * sqrt(spread / 20_000))
    assert spread == pytest.approx(told, rel=0.04)


def test_each_channel_loses_coincidences_in_its_dead_time() -> None:
    of = replace(HERALDED, dead_time_s=1e-6)
    true = np.array([1e4, 2e4])
    seen = 2.0 * true / (1 + true * 1e-6)

    found = detected(rows([[100.0, *seen]]), of)

    expected = 100.0 * np.prod(1 + true * 1e-6) - true.prod() * 1e-6 * 2.0
    assert found.value[0] == pytest.approx(expected, rel=1e-9)
    assert found.variance[0] == pytest.approx(100.0 * np.prod(1 + true * 1e-6) ** 2, rel=1e-9)
    assert true_rate_hz(seen / 2.0, 1e-6, "non-paralysable") == pytest.approx(true)


def test_a_heralded_night_runs_as_it_is_read_back() -> None:
    generator = np.random.default_rng(7)
    night = [
        replace(row, values=tuple(pairs(generator, row.values[0] / 50, (2e4, 2e4), 2.2, 1)[0]))
        for row in readings(HERALDED, generator)
    ]

    found = estimate_run(dataset(HERALDED, night))

    assert agree(run(HERALDED, night).estimate().to_json(), found.to_json())
    assert found.kappa_se is not None and found.kappa is not None
    assert abs(found.kappa) < 5 * found.kappa_se


def test_a_monitor_channel_gives_its_rate_and_variance() -> None:
    found = detected(rows([[10.0, 4e4], [10.0, 0.0]]), replace(PLAN, monitor=1))

    assert (found.monitor[0], found.monitor_variance[0]) == pytest.approx((2e4, 1e4))
    assert np.isnan(found.monitor[1])


def test_a_few_counts_a_visit_stay_unbiased() -> None:
    of, nights = plan(positions=3, laps=2, dead_time_s=0.0), 1000
    rates = rates_hz(of.positions_mm) * 1e-4  # 4 to 36 counts a second
    draws = np.random.default_rng(8).poisson(rates, (nights, 1, 3, 8)).astype(float)
    numbers = [headline(tables_of(Sums(draw, np.ones((1, 3, 8)), draw)), 1, of) for draw in draws]

    deltas = np.array([found["delta"] for found in numbers])
    kappas = np.array([found["kappa"] for found in numbers])
    true = estimate_sums(Sums(rates[None], np.ones((1, 3, 8)), rates[None]), of).delta
    measured = np.abs(draws[:, 0] @ contrast(tuple(range(8)), 3).pairs.T).sum(axis=-1) @ of.weights

    # The planned signs keep delta unbiased; the measured ones would not.
    assert true is not None
    assert deltas.mean() == pytest.approx(true, abs=4 * deltas.std() / sqrt(nights))
    assert measured.mean() > true + 8 * measured.std() / sqrt(nights)
    assert abs(np.median(kappas)) < 0.1 * np.std(kappas)


@pytest.mark.parametrize(
    ("key", "changes"),
    [
        ("monitor_channel", {"monitor": 1}),
        ("heralded", {"heralded": Heralded(1, 2, 1e-9)}),
        ("fano", {"fano": 2.0}),
    ],
)
def test_the_archive_says_what_a_value_is(key: str, changes: dict[str, Any]) -> None:
    of = replace(PLAN, **changes)

    found = plan_of_dataset(dataset(of, []))

    (name,) = changes
    assert getattr(found, name) == changes[name]
    assert key in dataset(of, []).attrs
