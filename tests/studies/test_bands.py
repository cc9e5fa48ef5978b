"""The studies of bands, ends, position tests and pools on a few nights; the whole ones run on request."""

from __future__ import annotations

from math import sqrt

import numpy as np
import pytest

from daq.estimate.whole import estimate_sums
from daq.scale.job import job_of
from daq.scale.study import carry_out, here
from tests.studies import places, pooled, stopped, watched
from tests.studies.pairs import TOGETHER, counted, pairs_of, planned, sums_of_night
from tests.studies.scaled import drawn


def test_pairs_give_what_the_estimate_gives() -> None:
    of, generator = planned(5, 6, 2.2, 3), np.random.default_rng(1)
    counts = counted(of, "random walk", generator, nights=2)

    kappa, se, counting = pairs_of(of, counts).after(6)

    for at, one in enumerate(counts):
        found = estimate_sums(sums_of_night(of, one), of.plan)
        assert kappa[at] == pytest.approx(found.kappa, rel=1e-9)
        assert se[at] == pytest.approx(found.kappa_se, rel=1e-9)
        # Without the part of the divisor in the propagation.
        assert counting[at] == pytest.approx(found.kappa_counting_se, rel=1e-3)


def test_a_few_watched_nights() -> None:
    row = watched.row("random walk", 400)

    assert row["whole night"] <= 0.05
    assert row["t from 2"] > 0.15
    assert row["t at the end"] == pytest.approx(0.05, abs=4 * sqrt(0.05 * 0.95 / 400))


def test_a_few_stopped_nights() -> None:
    row = stopped.row("steps", 400)

    assert row["goal"] == pytest.approx(0.95, abs=4 * sqrt(0.05 * 0.95 / 400))
    assert row["significance from 3"] < 0.85
    assert 15 < row["goal, pairs"] < 30


def test_a_few_nights_of_position_tests() -> None:
    null, one = places._null("linear", 200), places._found("one position", 60)

    for test in ("chi-squared", "largest", "Fourier"):
        assert null[test] == pytest.approx(0.05, abs=4 * sqrt(0.05 * 0.95 / 200))
    assert one["largest"] > 0.70 - 4 * sqrt(0.7 * 0.3 / 60)


@pytest.mark.parametrize(("nights", "tau", "column"), [(5, 0.0, "count weights"), (10, 1.0, "Paule-Mandel")])
def test_a_few_pools(nights: int, tau: float, column: str) -> None:
    row = pooled.row(nights, tau, 1000)

    assert row[column] == pytest.approx(0.95, abs=4 * sqrt(0.05 * 0.95 / 1000))


def test_a_study_of_the_project_is_the_same_however_its_blocks_are_cut(tmp_path) -> None:
    parameters = {"source": "steps"}
    columns = drawn("watched:nights", 3, parameters)
    job = job_of("tests.studies.watched:nights", parameters, 20261201, 3)

    found = carry_out(job, tmp_path, 1, here)

    assert len(columns["whole night"]) == 3 * TOGETHER
    assert found.figures["t from 2"]["mean"] == pytest.approx(columns["t from 2"].mean())
