"""Backlash: the reversal with its error, whatever creeps; a flank that has gone is a sentence."""

from __future__ import annotations

import numpy as np
import pytest

from daq.tasks.backlash import PATTERN, reversal


@pytest.mark.parametrize("repeats", [5, 10, 20])
def test_a_reversal_is_found_under_creep_with_the_error_of_the_closed_form(repeats: int) -> None:
    random, scatter, play = np.random.default_rng(repeats), 1.0, 2.0
    moved = np.resize(np.array(PATTERN, float), 2 * repeats)
    number = np.arange(2 * repeats)

    found = np.array(
        [
            reversal(
                moved,
                play / 2 * moved + 0.3 * scatter * number + scatter * random.standard_normal(2 * repeats),
            )
            for _ in range(2000)
        ]
    )

    closed = 2 * scatter / np.sqrt(2 * repeats)
    assert abs(found[:, 0].mean() - play) < 4 * closed / np.sqrt(2000)
    assert np.all(np.abs(found[:, 0] - play) < 6 * closed)
    assert found[:, 0].std() == pytest.approx(closed, rel=0.05 + 2 / np.sqrt(2 * 2000))
    assert np.mean(found[:, 2] ** 2) == pytest.approx(scatter**2, rel=0.05)
