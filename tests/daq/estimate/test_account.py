"""Budget, checks and what was left out: each line against its own definition."""

from __future__ import annotations

import json
from dataclasses import replace
from math import sqrt
from typing import Any

import numpy as np
import pytest
from scipy import stats

from daq.estimate import Plan, estimate_run
from daq.estimate.account import Account, account_of
from daq.estimate.arrays import FloatArray
from daq.estimate.budget import Line, smooth_drift
from daq.estimate.checks import Check, _by_block
from daq.estimate.dataset import rows_of_dataset
from daq.estimate.sensitivity import taken_visits
from daq.estimate.sums import plainly, sums_of
from daq.estimate.visits import visits_of
from daq.records import Quality, Reading
from tests.daq.estimate.nights import dataset, monitored, plan, rates_hz, readings

PLAN = plan(positions=5, laps=40, dead_time_s=0.0)
SHUT = 0


def account(of: Plan, rows: list[Reading], **attributes: Any) -> Account:
    """Return the account of a night with more in its record."""
    archive = dataset(of, rows)
    archive.attrs |= {
        "expected_hz": rates_hz(of.positions_mm).tolist(),
        "axes": ["mask", "detector"],
    } | attributes
    return account_of(archive)


def line(found: Account, name: str) -> Line:
    assert found.budget is not None
    return next(one for one in found.budget.lines if one.name == name)


def check(found: Account, name: str) -> Check:
    return next(one for one in found.checks if one.name.startswith(name))


def with_encoders(of: Plan, rows: list[Reading], sigma_mm: float, generator: np.random.Generator) -> Any:
    """Return a dataset whose detector stood somewhat off at every visit."""
    archive = dataset(of, rows)
    off = np.array([row.position_mm for row in rows]) + generator.normal(0, sigma_mm, len(rows))
    for edge in ("open", "close"):
        archive[f"encoder_detector_{edge}_mm"] = ("row", off)
    above, below = rates_hz(of.positions_mm + 1e-3), rates_hz(of.positions_mm - 1e-3)
    slope = np.log(above / below) / 2e-3
    archive.attrs |= {"slope_per_mm": slope.tolist(), "axes": ["mask", "detector"]}
    return archive


def test_the_lines_of_a_quiet_night() -> None:
    rows = readings(PLAN, np.random.default_rng(1))
    whole = estimate_run(dataset(PLAN, rows))

    found = account(
        PLAN, rows, dead_time_u_s=2e-9, slit_loads={"A of AB centre": 3e-5, "B of AB centre": -4e-5}
    )

    assert line(found, "counting").value == whole.kappa_counting_se
    assert line(found, "slit geometry").value == pytest.approx(5e-5)
    assert 0 < (line(found, "background").value or 0) < (whole.kappa_counting_se or 0)
    assert (line(found, "smooth drift, missing visits").value or 0) < 1e-6
    assert line(found, "detector position").value is None  # no encoder in this record
    assert line(found, "background").kind == "part"
    assert all(one.halve.endswith(".") for one in (found.budget.lines if found.budget else ()))


def test_the_total_adds_what_the_jackknife_cannot_see() -> None:
    rows = readings(PLAN, np.random.default_rng(2))
    whole = estimate_run(dataset(PLAN, rows))

    found = account(PLAN, rows, slit_loads={"A of AB centre": 3e-4})

    assert found.budget is not None and whole.kappa_se is not None and found.budget.total_se is not None
    assert found.budget.total_se == pytest.approx(sqrt(whole.kappa_se**2 + 9e-8), rel=1e-3)


def test_the_source_beyond_counting_is_the_rest_of_the_jackknife() -> None:
    generator = np.random.default_rng(3)
    flicker = np.exp(generator.normal(0, 0.01, len(PLAN.stand)))
    rows = readings(PLAN, generator, flicker)
    whole = estimate_run(dataset(PLAN, rows))

    beyond = line(account(PLAN, rows), "source beyond counting")

    assert whole.kappa_se is not None and whole.kappa_counting_se is not None and beyond.value is not None
    assert beyond.value == pytest.approx(sqrt(whole.kappa_se**2 - whole.kappa_counting_se**2))
    assert beyond.value_se is not None and beyond.value_se < beyond.value / 2


def test_a_smooth_drift_through_unmirrored_stands_is_foretold() -> None:
    """The plain kappa of a noise-free night is what the cubic through the levels of its stands says."""
    falling = 1 - 0.1 * np.linspace(0, 1, len(PLAN.stand))
    one_way = replace(PLAN, opening=np.tile(PLAN.opening[:8], len(PLAN.stand) // 8))
    true = rates_hz(one_way.positions_mm)[one_way.position, one_way.opening]
    base = readings(one_way, np.random.default_rng(4))
    rows = [
        replace(row, values=(float(value),)) for row, value in zip(base, true * falling * 2.2, strict=True)
    ]
    archive = dataset(one_way, rows)
    visits = visits_of(rows_of_dataset(archive), one_way)
    taken = taken_visits(visits, one_way, plainly(visits, one_way).visits)
    assert taken is not None

    told = smooth_drift(visits, one_way, taken)

    steady = [replace(row, gate_open_ns=0, gate_close_ns=0) for row in rows]  # no times: the plain contrast
    plain = estimate_run(dataset(one_way, steady)).kappa
    assert plain is not None and abs(plain) > 1e-5
    assert told == pytest.approx(plain, rel=0.02)


def test_the_dead_time_line_is_its_slope_times_its_uncertainty() -> None:
    rows = readings(PLAN, np.random.default_rng(5))

    one, double = (line(account(PLAN, rows, dead_time_u_s=u), "dead time").value for u in (1e-9, 2e-9))
    none, shifted = (estimate_run(dataset(replace(PLAN, dead_time_s=tau), rows)).kappa for tau in (0.0, 1e-9))

    assert one is not None and none is not None and shifted is not None and double == pytest.approx(2 * one)
    # Taking 1 ns more off is the opposite of having 1 ns left over; second order is 4e-4 of it.
    assert abs(shifted - none) == pytest.approx(one, rel=0.01)


def test_the_scatter_of_the_encoder_becomes_a_line() -> None:
    generator = np.random.default_rng(6)
    rows = readings(PLAN, generator)

    one, double = (
        line(
            account_of(with_encoders(PLAN, rows, sigma, np.random.default_rng(7))), "detector position"
        ).value
        for sigma in (0.01, 0.02)
    )

    assert one is not None and one > 1e-6 and double == pytest.approx(2 * one, rel=1e-6)


def test_the_position_line_is_what_such_a_scatter_does() -> None:
    sigma_mm, nights = 0.02, 60
    generator, kappas = np.random.default_rng(8), []
    of = plan(positions=5, laps=8, dead_time_s=0.0)
    base = readings(of, generator)
    for _ in range(nights):
        place = of.positions_mm[of.position] + generator.normal(0, sigma_mm, len(of.stand))
        true = rates_hz(place)[np.arange(len(place)), of.opening]
        rows = [replace(row, values=(float(v),)) for row, v in zip(base, true * 2.2, strict=True)]
        kappas.append(estimate_run(dataset(of, rows)).kappa)

    told = line(account_of(with_encoders(of, base, sigma_mm, generator)), "detector position").value

    # 60 nights know a standard deviation to 9 %: four of them.
    assert told == pytest.approx(float(np.std(np.array(kappas, float))), rel=0.37)


def test_a_monitor_that_is_used_has_its_line() -> None:
    generator = np.random.default_rng(9)
    of = replace(PLAN, monitor=1)
    level = np.exp(generator.normal(0, 0.02, len(of.stand)))

    found = account(of, monitored(readings(of, generator, level), generator, level))

    assert 0 < (line(found, "monitor").value or 0) < (line(found, "counting").value or 0)


def test_checks_of_a_quiet_night_are_quiet() -> None:
    names, ps = set(), []
    for seed in range(30):
        found = account(PLAN, readings(PLAN, np.random.default_rng(100 + seed)))
        names |= {one.name for one in found.checks}
        ps += [one.p for one in found.checks]

    assert {"odd less even pairs", "first less second laps", "scatter of the pairs over counting"} <= names
    # 150 probabilities, uniform if all is well: the share below 5 % is known to 1.8 %; four of them.
    assert np.mean(np.array(ps) < 0.05) == pytest.approx(0.05, abs=4 * 0.018)


def test_odd_and_even_pairs_are_compared_by_students_t() -> None:
    rows = readings(PLAN, np.random.default_rng(17))
    sums = sums_of(visits_of(rows_of_dataset(dataset(PLAN, rows)), PLAN), PLAN)
    by_pair = _by_block(sums.value, sums.live, PLAN)

    found = check(account(PLAN, rows), "odd less even pairs")

    judge = stats.ttest_ind(by_pair[::2], by_pair[1::2])
    assert found.p == pytest.approx(judge.pvalue, rel=1e-9)
    assert found.value / (found.se or 0.0) == pytest.approx(judge.statistic, rel=1e-9)
    assert by_pair.mean() == pytest.approx(estimate_run(dataset(PLAN, rows)).kappa, rel=1e-9)


def leaky(of: Plan, generator: np.random.Generator, which: FloatArray, more: float) -> list[Reading]:
    """Return readings with more counts of ABC in some visits."""
    spoilt = np.where(which & (of.opening == 7), 1 + more, 1.0)
    return readings(of, generator, spoilt)


@pytest.mark.parametrize("name", ["odd less even pairs", "first less second laps"])
def test_halves_that_disagree_are_found(name: str) -> None:
    lap = np.arange(len(PLAN.stand)) // (8 * 5)
    which = (lap // 2 if name.startswith("odd") else lap) % 2 == 0

    found = check(account(PLAN, leaky(PLAN, np.random.default_rng(10), which, 0.01)), name)

    assert found.p < 1e-4 and found.value > 0


def test_an_opening_that_leaks_at_one_position_shows_in_the_pattern() -> None:
    rows = leaky(PLAN, np.random.default_rng(11), PLAN.position == 2, 0.02)

    assert check(account(PLAN, rows), "leftover by position").p < 1e-4


def test_an_odd_first_stand_is_told_and_used_all_the_same() -> None:
    rows = readings(PLAN, np.random.default_rng(12))
    rows = [replace(row, values=(row.values[0] // 2,)) if row.visit == 2 else row for row in rows]

    found = account(PLAN, rows)

    assert found.first_stands_odd_mm == (float(PLAN.positions_mm[PLAN.position[2]]),)
    assert found.left_out == {}


def test_stands_left_out_are_counted_by_rule_and_many_are_doubtful() -> None:
    rows = readings(PLAN, np.random.default_rng(13))

    def spoilt(share: int, bit: Quality) -> Account:
        return account(
            PLAN, [replace(row, quality=bit) if row.visit % (8 * share) == 5 else row for row in rows]
        )

    few, by_counts, by_encoder = (
        spoilt(40, Quality.FINGERPRINT), spoilt(10, Quality.DISPERSION), spoilt(10, Quality.MOVED),
    )  # fmt: skip
    assert (few.left_out, few.doubtful) == ({"fingerprint": 5}, False)
    assert (by_counts.left_out, by_counts.doubtful) == ({"dispersion": 20}, True)
    assert by_encoder.doubtful is False
    assert spoilt(4, Quality.MOVED).doubtful is True


@pytest.mark.parametrize("broken", [{"live_s": 0.0}, {"values": (-1.0,)}, {"values": (float("inf"),)}])
def test_a_stand_without_a_usable_number_is_told_as_such(broken: dict[str, Any]) -> None:
    rows = [
        replace(row, **broken) if row.visit == 85 else row
        for row in readings(PLAN, np.random.default_rng(16))
    ]

    assert account(PLAN, rows).left_out == {"no usable number": 1}


def test_before_the_first_pair_there_is_no_budget() -> None:
    found = account(PLAN, readings(PLAN, np.random.default_rng(14))[:40])

    assert found.budget is None and found.checks == ()


def test_the_account_is_plain_json() -> None:
    found = account(PLAN, readings(PLAN, np.random.default_rng(15)), slit_loads={}).to_json()

    assert json.loads(json.dumps(found, allow_nan=False)) == found


def test_the_background_of_a_power_reading_may_be_nothing_and_less() -> None:
    of = replace(PLAN, counting="power")
    generator = np.random.default_rng(21)
    rows = [
        replace(
            row, values=(row.values[0] - 1760 if row.opening == SHUT else row.values[0],), values_var=(9e4,)
        )
        for row in readings(of, generator)
    ]

    background = line(account(of, rows), "background")

    assert min(row.values[0] for row in rows) < 0
    assert background.value is not None and 0 < background.value < 1
