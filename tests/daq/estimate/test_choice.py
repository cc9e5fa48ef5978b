from __future__ import annotations

from dataclasses import replace
from math import sqrt

import numpy as np
import pytest

from daq.estimate import Estimate, Plan, Running, estimate_run
from daq.estimate.arrays import FloatArray
from daq.estimate.choice import JOINT, MONITORED, PLAIN
from daq.estimate.dataset import rows_of_dataset
from daq.estimate.levels import levels
from daq.estimate.sensitivity import taken_visits
from daq.estimate.visits import visits_of
from daq.records import Quality, Reading
from tests.daq.estimate.nights import SLOT_S, dataset, monitored, plan, reading, readings, shuffled
from tests.daq.estimate.test_running import agree, run

PLAN = plan(positions=4, laps=16)


def walking(of: Plan, generator: np.random.Generator, per_sqrt_hour: float = 0.1) -> FloatArray:
    """Return a source that walks, by visit."""
    steps = generator.normal(0.0, per_sqrt_hour * sqrt(SLOT_S / 3600), len(of.stand))
    return np.exp(np.cumsum(steps))


def flickering(of: Plan, generator: np.random.Generator) -> FloatArray:
    """Return a source that jumps by 2 % from visit to visit."""
    return np.exp(generator.normal(0.0, 0.02, len(of.stand)))


def left_out(rows: list[Reading], share: float) -> list[Reading]:
    """Return readings of which every so many-th stand has a visit off its target."""
    every = round(1 / share)
    return [replace(row, quality=Quality.OFF_TARGET) if row.visit % (8 * every) == 3 else row for row in rows]


def whole(of: Plan, rows: list[Reading]) -> Estimate:
    """Return the offline estimate, and see that the running one is the same."""
    found = estimate_run(dataset(of, rows))
    assert agree(run(of, rows).estimate().to_json(), found.to_json())
    return found


def test_a_mirrored_night_is_estimated_by_the_plain_contrast() -> None:
    found = whole(PLAN, readings(PLAN, np.random.default_rng(1)))

    assert found.estimator == PLAIN
    assert found.why == "the stands are mirrored and 0.0 % of them are left out"


def test_a_random_order_is_estimated_by_the_joint_fit() -> None:
    generator = np.random.default_rng(2)
    of = shuffled(PLAN, generator)

    found = whole(of, readings(of, generator, walking(of, generator)))

    assert found.estimator == JOINT
    assert found.why.startswith("the stands are not mirrored (unbalance 0.")


def test_many_stands_left_out_call_for_the_joint_fit_and_few_do_not() -> None:
    rows = readings(PLAN, np.random.default_rng(3))

    many, few = whole(PLAN, left_out(rows, 1 / 8)), whole(PLAN, left_out(rows, 1 / 32))

    assert (many.estimator, few.estimator) == (JOINT, PLAIN)
    assert many.why == "12.5 % of the stands are left out, and their good visits count"


def test_a_stand_with_a_strange_fingerprint_lends_no_visit_to_the_fit() -> None:
    rows = readings(PLAN, np.random.default_rng(18))
    strange = [replace(row, quality=Quality.FINGERPRINT) if row.visit == 15 else row for row in rows]
    moved = [replace(row, quality=Quality.MOVED) if row.visit == 15 else row for row in rows]

    by_stand, by_visit = (visits_of(rows_of_dataset(dataset(PLAN, one)), PLAN) for one in (strange, moved))

    assert np.flatnonzero(~by_stand.good).tolist() == list(range(8, 16))
    assert np.flatnonzero(~by_visit.good).tolist() == [15]


def test_a_night_en_bloc_is_not_mended_by_a_fit() -> None:
    by_opening = np.argsort(PLAN.opening, kind="stable")
    blocked = replace(
        PLAN, **{name: getattr(PLAN, name)[by_opening] for name in ("stand", "pair", "position", "opening")}
    )

    found = whole(blocked, readings(blocked, np.random.default_rng(4)))

    assert found.estimator == PLAIN
    assert "the order is at fault" in found.why


def test_a_pause_between_stands_leaves_the_night_mirrored() -> None:
    rows = readings(PLAN, np.random.default_rng(5))
    later_ns = [7200 * 10**9 if row.visit >= 8 * 13 else 0 for row in rows]
    late = [
        replace(row, gate_open_ns=row.gate_open_ns + ns, gate_close_ns=row.gate_close_ns + ns)
        for row, ns in zip(rows, later_ns, strict=True)
    ]

    assert whole(PLAN, late).estimator == PLAIN


def test_the_joint_fit_mends_a_random_order_under_a_falling_source() -> None:
    generator = np.random.default_rng(6)
    joint, plain = [], []
    for _ in range(60):
        of = shuffled(plan(positions=3, laps=8, dead_time_s=0.0), generator)
        rows = readings(of, generator, np.linspace(1.0, 0.2, len(of.stand)))
        found = estimate_run(dataset(of, rows))
        steady = [replace(row, gate_open_ns=0, gate_close_ns=0) for row in rows]  # no times: no fit
        without = estimate_run(dataset(of, steady))
        assert found.kappa is not None and found.kappa_model_se is not None and without.kappa is not None
        assert without.estimator == PLAIN
        joint.append(found.kappa / found.kappa_model_se)
        plain.append(without.kappa / found.kappa_model_se)

    # A walk fitted to a smooth fall is careful; 60 nights know a standard deviation to 9 %: four of them.
    assert np.std(joint) < 1.37
    assert np.std(plain) > 2 * np.std(joint)


def test_the_joint_fit_of_a_mirrored_night_is_the_plain_contrast() -> None:
    generator = np.random.default_rng(7)
    of = plan(positions=3, laps=16, dead_time_s=0.0)
    rows = readings(of, generator, walking(of, generator, 0.03))
    spoilt = left_out(rows, 1 / 16)  # more than 5 % of the stands

    joint, plain = whole(of, spoilt), whole(of, rows)

    assert (joint.estimator, plain.estimator) == (JOINT, PLAIN)
    assert joint.kappa is not None and plain.kappa is not None and plain.kappa_se is not None
    # Half a percent of the visits are missing: the two differ by the noise of those, a tenth of the bar.
    assert abs(joint.kappa - plain.kappa) < 0.4 * plain.kappa_se


def test_the_bars_of_a_joint_fit_are_refitted() -> None:
    generator = np.random.default_rng(8)
    of = shuffled(plan(positions=3, laps=24, dead_time_s=0.0), generator)

    found = whole(of, readings(of, generator, walking(of, generator)))

    assert found.kappa_se is not None and found.kappa_model_se is not None
    assert found.kappa_counting_se is not None and found.dof == 11
    # A jackknife of twelve blocks knows itself to 21 %: three of them.
    assert found.kappa_se == pytest.approx(found.kappa_model_se, rel=0.64)
    assert found.kappa_model_se > found.kappa_counting_se


def test_a_monitor_is_used_where_it_takes_more_drift_away_than_it_costs() -> None:
    generator = np.random.default_rng(9)
    level = flickering(PLAN, generator)
    of = replace(PLAN, monitor=1)
    rows = monitored(readings(PLAN, generator, level), generator, level)

    found = whole(of, rows)

    without = whole(PLAN, readings(PLAN, generator, level))
    assert found.estimator == MONITORED
    assert found.why.startswith("the monitor's noise costs ")
    assert found.excess is not None and without.excess is not None
    assert found.excess < 1.8 < without.excess


def test_a_monitor_of_a_steady_source_is_left_alone() -> None:
    generator = np.random.default_rng(10)
    of = replace(PLAN, monitor=1)
    rows = monitored(readings(PLAN, generator), generator, np.ones(len(PLAN.stand)))

    assert whole(of, rows).estimator == PLAIN


def test_the_noise_of_the_monitor_is_part_of_the_counting_bar() -> None:
    generator = np.random.default_rng(11)
    level = flickering(PLAN, generator)
    of = replace(PLAN, monitor=1)
    night = readings(PLAN, generator, level)

    bright, dim = (whole(of, monitored(night, generator, level, counts)) for counts in (1e8, 1e5))

    assert bright.kappa_counting_se is not None and dim.kappa_counting_se is not None
    # By hand: sum over visits of weight^2 / 1e5; relative to 1/counts of the brightest visits about one.
    assert dim.kappa_counting_se > 1.2 * bright.kappa_counting_se


def test_where_the_monitor_knows_better_it_replaces_the_fit() -> None:
    generator = np.random.default_rng(12)
    of = shuffled(replace(PLAN, monitor=1), generator)
    level = flickering(of, generator)

    found = whole(of, monitored(readings(of, generator, level), generator, level))

    assert found.estimator == MONITORED
    assert found.why.endswith("the monitor knows the source better than a fit does")


def test_the_model_bar_of_the_plain_contrast_holds_counting_and_the_walk() -> None:
    generator = np.random.default_rng(13)
    of = plan(positions=4, laps=40, dead_time_s=0.0)

    found = whole(of, readings(of, generator, walking(of, generator, 0.3)))

    assert found.kappa_model_se is not None and found.kappa_counting_se is not None
    assert found.drift_per_sqrt_hour is not None
    assert found.kappa_model_se > 1.05 * found.kappa_counting_se
    # 160 stands of 24 s, counting noise far below their steps: known to sqrt(1/320) = 6 %, less what the mean
    # over a stand takes of a step, a sixth.
    assert found.drift_per_sqrt_hour == pytest.approx(0.3, rel=0.35)


def test_levels_follow_the_source_and_are_one_on_average() -> None:
    of = plan(positions=4, laps=16, dead_time_s=0.0)
    strength = 1 - 0.3 * np.arange(len(of.stand)) / len(of.stand)
    visits = visits_of(rows_of_dataset(dataset(of, readings(of, np.random.default_rng(19), strength))), of)
    taken = taken_visits(visits, of, visits.good)
    assert taken is not None

    level, variance = levels(visits, of, taken)

    true = strength.reshape(-1, 8).mean(axis=1)
    assert level.mean() == pytest.approx(1.0, rel=1e-12)
    # 64 stands, each known to its own error: none is off by more than four and a half of them.
    assert np.abs(level - true / true.mean()).max() < 4.5 * np.sqrt(variance.max())


def test_kappa_with_the_excluded_stands_is_told_beside() -> None:
    rows = left_out(readings(PLAN, np.random.default_rng(14)), 1 / 32)

    found = whole(PLAN, rows)

    every = whole(PLAN, [replace(row, quality=Quality.GOOD) for row in rows])
    assert found.kappa_with_excluded == every.kappa
    assert found.kappa_counting_se is not None and every.kappa_counting_se is not None
    change_se = sqrt(found.kappa_counting_se**2 - every.kappa_counting_se**2)
    assert found.excluded_change_se == pytest.approx(change_se)
    assert every.kappa_with_excluded is None and every.excluded_change_se is None


def test_history_of_a_joint_fit_is_what_was_known_after_each_pair() -> None:
    generator = np.random.default_rng(15)
    of = shuffled(PLAN, generator)
    rows = readings(of, generator, walking(of, generator))
    known, running = [], Running(of)
    for start in range(0, len(rows), 64):  # a pair
        for row in rows[start : start + 64]:
            running.add(row)
        found = running.estimate()
        known.append((found.kappa, *(found.interval_95 or (None, None))))

    later = run(of, rows).history()

    for history in (running.history(), later):
        told = zip(*(history[name] for name in ("kappa", "interval_low", "interval_high")), strict=True)
        assert agree([list(one) for one in told], [list(one) for one in known])
    assert known[0][1] is None and all(low is not None for _, low, _ in known[1:])


def test_the_fit_is_not_made_again_before_another_pair_is_complete() -> None:
    generator = np.random.default_rng(16)
    of = shuffled(PLAN, generator)
    rows = readings(of, generator, walking(of, generator))
    running = run(of, rows[: 64 * 3])
    before = running.estimate()

    for row in rows[64 * 3 : 64 * 3 + 8]:
        running.add(row)
    after = running.estimate()

    assert after.terms is before.terms  # the very same: nothing was worked out again
    assert after.visits == before.visits + 8
    assert agree(after.to_json(), estimate_run(dataset(of, rows[: 64 * 3 + 8])).to_json())


def test_a_reading_of_another_channel_count_is_no_monitor() -> None:
    of = replace(PLAN, monitor=1)
    dark = [replace(row, values=(*row.values, 0.0)) for row in readings(PLAN, np.random.default_rng(17))]

    assert whole(of, dark).estimator == PLAIN
    assert reading(PLAN, 0, 1.0).values == (1.0,)
