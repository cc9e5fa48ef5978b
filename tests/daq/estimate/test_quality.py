"""The quality rules one by one, and what they find on quiet and on spoilt nights."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from daq.estimate import Plan
from daq.estimate.judge import Judge
from daq.estimate.quality import Rules, clock_bits, counter_bits, dispersion, encoder_bits, fingerprint
from daq.estimate.rejudge import AGAIN, judged_again
from daq.records import EXCLUDING, Quality, Reading
from tests.daq.estimate.nights import again, dataset, monitored, plan, rates_hz, readings

RULES = Rules()
PLAN = plan(positions=4, laps=24, dead_time_s=0.0)
NIGHT = readings(PLAN, np.random.default_rng(1))


def judged(of: Plan, rows: list[Reading], rules: Rules = RULES) -> list[Reading]:
    """Return readings with the bits that the rules add."""
    judge = Judge(of, rules, rates_hz(of.positions_mm))
    return [judge.judge(row) for row in rows]


def flagged(rows: list[Reading], bit: Quality) -> list[int]:
    """Return the visits that carry a bit."""
    return [row.visit for row in rows if row.quality & bit]


def scaled(row: Reading, factor: float) -> Reading:
    return replace(row, values=(float(round(row.values[0] * factor)), *row.values[1:]))


@pytest.mark.parametrize(
    ("ends", "expected"),
    [
        ((2.0, 2.0), Quality.GOOD),
        ((2.02, 2.02), Quality.OFF_TARGET),
        ((2.0, 1.98), Quality.OFF_TARGET | Quality.MOVED),
        ((1.994, 2.006), Quality.MOVED),
    ],
)
def test_an_encoder_is_compared_with_target_and_with_itself(ends: Any, expected: Quality) -> None:
    assert encoder_bits({"mask": 2.0}, {"mask": ends}, {"mask": 0.01}) == expected


@pytest.mark.parametrize(
    ("changes", "rules", "expected"),
    [
        ({}, RULES, Quality.GOOD),
        ({"live_s": 2.19}, RULES, Quality.GATE_TIME),
        ({"values": (901.0,)}, Rules(counter_range=1000.0), Quality.OVERFLOW),
        ({"values": (899.0,)}, Rules(counter_range=1000.0), Quality.GOOD),
        ({"values": (0.0,)}, RULES, Quality.NO_COUNTS),
    ],
)
def test_the_counter_is_asked_for_time_range_and_any_count(
    changes: Any, rules: Rules, expected: Quality
) -> None:
    row = replace(NIGHT[0], **changes)

    assert counter_bits(row, rules, expected=12.0) == expected


def test_nothing_is_no_wonder_where_little_is_due() -> None:
    assert counter_bits(replace(NIGHT[0], values=(0.0,)), RULES, expected=11.0) == Quality.GOOD


@pytest.mark.parametrize(("late_s", "expected"), [(0.4, Quality.GOOD), (-0.6, Quality.CLOCK_STEP)])
def test_utc_is_compared_with_the_run_clock(late_s: float, expected: Quality) -> None:
    later = replace(NIGHT[1], utc_ns=NIGHT[1].utc_ns + round(late_s * 1e9))

    assert clock_bits(NIGHT[0], later, RULES) == expected


def test_dispersion_is_the_chi_squared_of_even_slices() -> None:
    slices = [105, 98, 110, 87, 101, 99, 96, 104, 103, 97]

    found = dispersion(slices)

    judged_chi2, judged_p = stats.chisquare(slices)
    assert found.chi2 == pytest.approx(judged_chi2)
    assert found.dof == 9
    assert found.beyond(judged_p * 1.001) and not found.beyond(judged_p * 0.999)


def test_thin_slices_are_merged_to_ten_counts() -> None:
    found = dispersion(
        [3, 4, 2, 5, 3, 4, 2, 3, 4, 2]
    )  # 32 counts: four slices make 12.8, the rest stays together

    by_hand = stats.chisquare([14, 18], np.array([4, 6]) * 3.2)
    assert found.chi2 == pytest.approx(by_hand.statistic)
    assert found.dof == 1


@pytest.mark.parametrize("per_slice", [0.5, 2.0, 10.0, 50.0])
def test_a_steady_source_is_hardly_ever_dispersed(per_slice: float) -> None:
    draws = np.random.default_rng(2).poisson(per_slice, (20_000, 10))

    share = np.mean([dispersion(draw).beyond(1e-3) for draw in draws])

    # 20 expected of 20 000: four standard errors are 18; merged slices keep it there.
    assert share < (20 + 18) / 20_000


@given(st.lists(st.integers(50, 10_000), min_size=8, max_size=8), st.floats(0.1, 100))
def test_the_strength_of_the_source_drops_out_of_the_fingerprint(counts: list[int], factor: float) -> None:
    earlier = np.array(counts) * 7.0

    found = fingerprint(np.array(counts), np.ones(8), earlier * factor, np.full(8, 7.0))

    assert found.chi2 == pytest.approx(0.0, abs=1e-6)
    assert found.dof == 7


def test_the_fingerprint_is_the_homogeneity_test_of_a_table() -> None:
    table = np.random.default_rng(3).poisson([[2000.0] * 8, [9000.0] * 8])

    found = fingerprint(table[0], np.ones(8), table[1], np.ones(8))

    judge = stats.chi2_contingency(table, correction=False)
    assert found.chi2 == pytest.approx(judge.statistic, rel=1e-9)
    assert found.dof == judge.dof


def test_unequal_live_times_are_no_difference() -> None:
    rates = np.linspace(1e3, 8e3, 8)
    live, earlier = np.linspace(1.0, 2.0, 8), np.linspace(30.0, 10.0, 8)

    found = fingerprint(rates * live, live, rates * earlier * 1.3, earlier)

    assert found.chi2 == pytest.approx(0.0, abs=1e-3)


def test_the_opening_that_stands_out_is_named() -> None:
    counts = np.full(8, 1e4)
    counts[5] *= 0.5

    assert fingerprint(counts, np.ones(8), np.full(8, 1e5), np.full(8, 10.0)).worst == 5


@pytest.mark.parametrize("rate", [0.5, 3.0, 20.0])
def test_thin_fingerprints_keep_their_false_alarms(rate: float) -> None:
    generator = np.random.default_rng(4)
    pattern = np.array([0.1, 1, 1, 4, 1, 4, 4, 9]) * rate
    stands, earlier = generator.poisson(pattern, (8000, 8)), generator.poisson(30 * pattern, (8000, 8))

    share = np.mean(
        [
            fingerprint(one, np.ones(8), other, np.full(8, 30.0)).beyond(1e-2)
            for one, other in zip(stands, earlier, strict=True)
        ]
    )

    # 80 expected of 8000: four standard errors are 36; merged cells hold the level within half of it.
    assert share < (80 + 36) / 8000 * 1.5


def test_a_quiet_night_is_left_alone() -> None:
    assert not flagged(judged(PLAN, NIGHT), EXCLUDING)


def test_a_walking_source_is_left_alone() -> None:
    generator = np.random.default_rng(5)
    walk = np.exp(np.cumsum(generator.normal(0, 0.03 * np.sqrt(3 / 3600), len(PLAN.stand))))

    assert not flagged(judged(PLAN, readings(PLAN, generator, walk)), EXCLUDING)


def test_a_half_covered_opening_leaves_its_stand_out_and_is_named() -> None:
    rows = [scaled(row, 0.5) if row.visit == 8 * 40 + 2 else row for row in NIGHT]
    judge = Judge(PLAN, RULES, rates_hz(PLAN.positions_mm))
    said = []

    for row in rows:
        judge.judge(row)
        said += [judge.finding] if judge.finding else []

    assert flagged(judged(PLAN, rows), Quality.FINGERPRINT) == [8 * 40 + 7]  # the last visit of the stand
    assert len(said) == 1 and said[0].endswith("opening B stands out.")  # third of a forward stand


def test_an_odd_first_stand_does_not_spoil_those_that_follow() -> None:
    bad_first = [scaled(row, 0.5) if row.visit == 2 else row for row in NIGHT]
    repeated = [
        again(row, 2, row.values[0] + 30) for row in NIGHT[8 * 7 : 8 * 8]
    ]  # lap 2 comes back to it last
    rows = [*bad_first[: 8 * 8], *repeated, *bad_first[8 * 8 :]]

    found = judged(PLAN, rows)

    # Lap 2's first try disagrees with the spoilt stand; its second agrees with its first, and all later ones.
    assert [(row.visit, row.attempt) for row in found if row.quality & Quality.FINGERPRINT] == [(63, 1)]


def test_a_stand_with_a_bad_encoder_is_no_reference() -> None:
    spoilt = [
        replace(scaled(row, 0.5), quality=Quality.MOVED) if row.visit in (2, 8 * 7 + 5) else row
        for row in NIGHT
    ]

    assert not flagged(judged(PLAN, spoilt), Quality.FINGERPRINT)


def test_interleaved_stands_are_not_fingerprinted() -> None:
    by_opening = np.argsort(PLAN.opening, kind="stable")
    names = ("stand", "pair", "position", "opening")
    blocked = replace(PLAN, **{name: getattr(PLAN, name)[by_opening] for name in names})
    falling = np.linspace(1.0, 0.5, len(PLAN.stand))

    found = judged(blocked, readings(blocked, np.random.default_rng(6), falling))

    assert not flagged(found, Quality.FINGERPRINT)


def test_a_dark_visit_is_flagged_by_what_was_kept_there() -> None:
    rows = [scaled(row, 0.0) if row.visit == 8 * 30 + 4 else row for row in NIGHT]

    assert flagged(judged(PLAN, rows), Quality.NO_COUNTS) == [8 * 30 + 4]


def test_slices_with_a_gap_leave_the_stand_out() -> None:
    def sliced(row: Reading) -> Reading:
        even = [round(row.values[0] / 10)] * 10
        even[3] = 0 if row.visit == 100 else even[3]
        return replace(row, slices=tuple((count,) for count in even))

    assert flagged(judged(PLAN, [sliced(row) for row in NIGHT]), Quality.DISPERSION) == [100]


def test_a_stand_brighter_than_its_monitor_is_flagged_and_kept() -> None:
    of = replace(PLAN, monitor=1)
    generator = np.random.default_rng(7)
    walk = np.exp(np.cumsum(generator.normal(0, 0.002, len(PLAN.stand))))
    rows = monitored(readings(of, generator, walk), generator, walk)
    rows = [scaled(row, 1.05) if row.visit // 8 == 60 else row for row in rows]

    found = judged(of, rows)

    assert flagged(found, Quality.MONITOR) == [8 * 60 + 7]
    assert not flagged(found, EXCLUDING)


def test_a_run_that_goes_on_is_judged_as_if_it_had_not_stopped() -> None:
    rows = [scaled(row, 0.5) if row.visit in (8 * 40 + 2, 8 * 70) else row for row in NIGHT]
    whole = judged(PLAN, rows)
    judge = Judge(PLAN, RULES, rates_hz(PLAN.positions_mm))

    for row in whole[:350]:
        judge.take(row)
    rest = [judge.judge(row) for row in rows[350:]]

    assert rest == whole[350:]
    assert flagged(whole, Quality.FINGERPRINT) == [8 * 40 + 7, 8 * 70 + 7]


def test_bits_are_worked_out_again_from_the_archive() -> None:
    rows = [scaled(row, 0.5) if row.visit == 8 * 40 + 2 else row for row in NIGHT]
    rows[30] = replace(rows[30], live_s=2.1)
    rows[90] = replace(rows[90], utc_ns=rows[90].utc_ns + 10**9)
    archive = dataset(PLAN, judged(PLAN, rows))
    archive.attrs["expected_hz"] = rates_hz(PLAN.positions_mm).tolist()
    stored = archive["quality"].values.copy()

    assert np.array_equal(judged_again(archive), stored)
    assert {int(bit) for bit in np.unique(stored) if bit} == {
        int(Quality.FINGERPRINT),
        int(Quality.GATE_TIME),
        int(Quality.CLOCK_STEP),
    }
    archive["quality"].values[:] = stored | int(Quality.DISPERSION)
    assert int(Quality.DISPERSION) & int(AGAIN) and np.array_equal(judged_again(archive), stored)


def test_the_rules_of_the_run_are_taken_from_its_record() -> None:
    rows = [scaled(row, 0.97) if row.visit == 8 * 40 + 2 else row for row in NIGHT]
    archive = dataset(PLAN, rows)

    assert judged_again(archive).any()
    archive.attrs["quality"] = {"fingerprint_p": 1e-60}
    assert not judged_again(archive).any()
