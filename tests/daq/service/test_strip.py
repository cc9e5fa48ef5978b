"""The rate strip keeps every dip, however long the run."""

import numpy as np
import pytest

from daq.itinerary import compose
from daq.service.strip import COLUMNS, Strip
from dashboard.figures import strip as drawn
from tests.dashboard.feeds import feed
from tests.examples import lantern, lantern_rig

SCALE_HZ = 41_000.0


@pytest.fixture
def strip() -> Strip:
    itinerary = compose(lantern(itinerary__laps=2, positions__number=3), lantern_rig())
    return Strip(itinerary, {"blinding": "open"})


@pytest.mark.parametrize("at", [0, 123_456, 999_999])
def test_one_sample_that_is_missing_among_a_million_is_drawn(strip: Strip, at: int) -> None:
    levels = np.random.default_rng(7).normal(1.0, 0.003, 1_000_000)
    levels[at] = 0.2
    strip.hours, strip.levels = np.linspace(0, 10, levels.size).tolist(), levels.tolist()

    columns = strip.columns(SCALE_HZ)

    assert len(columns["low"]) == COLUMNS
    assert min(columns["low"]) == pytest.approx(0.2 * SCALE_HZ)
    assert sum(low < 0.5 * SCALE_HZ for low in columns["low"]) == 1
    assert min(drawn(feed(rate=columns))["low"]) == pytest.approx(0.2 * SCALE_HZ / 1000, rel=1e-3)


def test_the_mean_of_a_column_is_that_of_its_stands(strip: Strip) -> None:
    levels = np.random.default_rng(8).normal(1.0, 0.003, 10 * COLUMNS)
    strip.hours, strip.levels = np.linspace(0, 10, levels.size).tolist(), levels.tolist()

    columns = strip.columns(SCALE_HZ)

    assert columns["mean"] == pytest.approx(levels.reshape(COLUMNS, -1).mean(axis=1) * SCALE_HZ, abs=0.01)
