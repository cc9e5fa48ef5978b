"""What whole laps show: an opening that changed, a mask that has not settled, wrong labels, a weak beam."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np

from daq.estimate import Plan
from daq.estimate.judge import Judge
from daq.estimate.labels import taken_for
from daq.estimate.quality import Rules
from daq.estimate.rejudge import rejudged
from daq.records import EXCLUDING, Quality, Reading
from tests.daq.estimate.nights import dataset, plan, rates_hz, readings

PLAN = plan(positions=16, laps=14, dead_time_s=0.0)
EXPECTED_HZ = rates_hz(PLAN.positions_mm)
NIGHT = readings(PLAN, np.random.default_rng(1))
LAP = PLAN.stand // 16
ABC, AB, A = 7, 3, 1


def heard(rows: list[Reading], of: Plan = PLAN) -> tuple[list[str], list[Reading]]:
    """Return what a night's laps showed, and its readings as they were judged."""
    judge, notes, judged = Judge(of, Rules(), EXPECTED_HZ), [], []
    for row in rows:
        judged.append(judge.judge(row))
        notes += [*judge.notes, *([judge.labels] if judge.labels else [])]
        judge.labels = ""  # heard
    return notes, judged


def changed(factor: Callable[[Reading], float]) -> list[Reading]:
    return [replace(row, values=(float(round(row.values[0] * factor(row))),)) for row in NIGHT]


def sliced(row: Reading, first: float, generator: np.random.Generator) -> Reading:
    shares = np.array([first, *[1.0] * 9])
    parts = generator.multinomial(int(row.values[0]), shares / shares.sum())
    return replace(row, slices=tuple((int(part),) for part in parts))


def test_a_quiet_night_has_nothing_to_say() -> None:
    generator = np.random.default_rng(2)

    assert heard([sliced(row, 1.0, generator) for row in NIGHT])[0] == []


def test_an_opening_that_loses_a_little_in_one_lap_is_named_with_its_size_and_stays() -> None:
    rows = changed(lambda row: 0.995 if row.opening == ABC and LAP[row.visit] == 9 else 1.0)

    notes, judged = heard(rows)

    (note,) = notes
    assert note.startswith("Lap 10 does not fit the laps before; opening ABC stands out by -0.")
    assert not any(row.quality & EXCLUDING for row in judged)


def test_dark_counts_that_do_not_follow_a_falling_source_are_no_change_and_hide_none() -> None:
    level = np.linspace(1.0, 0.7, len(PLAN.stand))
    seen_hz = EXPECTED_HZ[PLAN.position, PLAN.opening] * level + 300.0
    quiet = np.random.default_rng(6).poisson(seen_hz * 2.2)
    less = np.round(quiet * np.where((LAP == 9) & (PLAN.opening == 0), 0.93, 1.0))

    night, changed_night = (
        heard([replace(row, values=(float(count),)) for row, count in zip(NIGHT, counts, strict=True)])[0]
        for counts in (quiet, less)
    )

    assert night == []
    assert changed_night[0].startswith("Lap 10 does not fit the laps before; opening none stands out by -")


def test_an_opening_whose_visits_begin_darker_has_not_settled() -> None:
    generator = np.random.default_rng(3)
    rows = [sliced(row, 0.97 if row.opening == AB else 1.0, generator) for row in NIGHT]

    notes, _ = heard(rows)

    assert len(notes) == 13  # the last lap has no stand after it
    assert all(" first slice of AB holds -" in note for note in notes)


def test_openings_whose_labels_are_swapped_are_named_after_the_first_lap() -> None:
    counts, expected = np.round(EXPECTED_HZ * 17.6), EXPECTED_HZ[:, [0, 1, 2, 7, 4, 5, 6, 3]]

    assert taken_for(counts, EXPECTED_HZ) == {}
    assert taken_for(counts, expected) == {AB: ABC, ABC: AB}


def test_openings_that_look_alike_are_not_accused() -> None:
    generator = np.random.default_rng(4)
    even = EXPECTED_HZ[:, [0, 1, 1, 3, 1, 5, 3, 7]]

    assert not any(taken_for(generator.poisson(even).astype(float), even) for _ in range(20))


def test_patterns_that_fit_no_labels_accuse_none() -> None:
    shifted = np.roll(EXPECTED_HZ, 1, axis=0)

    assert taken_for(np.round(shifted * 10), EXPECTED_HZ) == {}


def test_a_swapped_mask_is_heard_of_once_and_before_the_second_lap_is_over() -> None:
    swapped = {AB: ABC, ABC: AB}
    rates = EXPECTED_HZ[PLAN.position, [swapped.get(opening, opening) for opening in PLAN.opening]]
    rows = [
        replace(row, values=(float(count),))
        for row, count in zip(NIGHT, np.random.default_rng(5).poisson(rates * 2.2), strict=True)
    ]

    notes, _ = heard(rows)

    (note,) = notes
    assert "AB looks like ABC, ABC looks like AB" in note


def test_a_source_that_leaves_its_band_is_flagged_told_once_and_kept() -> None:
    rows = changed(lambda row: 0.3 if LAP[row.visit] >= 8 else 1.0)

    notes, judged = heard(rows)

    assert [note for note in notes if "3 stands in a row" in note and "0.5 .. 1.5" in note] == notes
    assert len(notes) == 1
    assert sum(bool(row.quality & Quality.RATE) for row in judged) == 6 * 16
    assert not any(row.quality & EXCLUDING for row in judged)


def test_off_line_the_laps_show_the_same() -> None:
    rows = changed(lambda row: 0.995 if row.opening == ABC and LAP[row.visit] == 9 else 1.0)
    notes, judged = heard(rows)
    archive = dataset(PLAN, judged)
    archive.attrs["expected_hz"] = EXPECTED_HZ.tolist()

    quality, again = rejudged(archive)

    assert again == notes and len(notes) == 1
    assert np.array_equal(quality, archive["quality"].values)
