from __future__ import annotations

import numpy as np
import pytest

from daq.estimate import cusum, cusum_run_length, ewma, ewma_run_length


def test_a_cusum_gathers_what_exceeds_its_allowance() -> None:
    chart = cusum([0.0, 2.0, 3.0, -9.0, 1.0], target=0.0, k=0.5, h=3.5)

    assert chart.high == pytest.approx([0.0, 1.5, 4.0, 0.0, 0.5])
    assert chart.low == pytest.approx([0.0, 0.0, 0.0, 8.5, 7.0])
    assert chart.alarms.tolist() == [2, 3, 4]


def test_an_ewma_moves_a_share_of_the_way_to_each_value() -> None:
    chart = ewma([10.0, 10.0, -30.0], target=0.0, sigma=1.0, weight=0.5, limit=6.0)

    assert chart.average == pytest.approx([5.0, 7.5, -11.25])
    assert (chart.lower, chart.upper) == pytest.approx((-6 / np.sqrt(3), 6 / np.sqrt(3)))
    assert chart.alarms.tolist() == [0, 1, 2]


def test_an_ewma_that_weighs_nothing_but_the_newest_value_is_the_value() -> None:
    assert ewma([3.0, 1.0], 0.0, 1.0, 1.0, 2.0).average.tolist() == [3.0, 1.0]


@pytest.mark.parametrize("shift", [0.0, 1.0])
def test_charts_run_as_long_as_predicted(shift: float) -> None:
    # 1500 runs; a run length scatters about as much as its mean, so 2.6 %: four of them.
    values = np.random.default_rng(9).normal(shift, 1.0, (1500, 1000 if shift == 0 else 100))
    first: dict[str, list[int]] = {"cusum": [], "ewma": []}
    for row in values:
        first["cusum"].append(cusum(row, 0.0, 0.5, 3.0).alarms[0] + 1)
        first["ewma"].append(ewma(row, 0.0, 1.0, 0.2, 2.0).alarms[0] + 1)

    assert np.mean(first["cusum"]) == pytest.approx(cusum_run_length(0.5, 3.0, shift), rel=0.104)
    assert np.mean(first["ewma"]) == pytest.approx(ewma_run_length(0.2, 2.0, shift), rel=0.104)


def test_the_direction_of_a_shift_does_not_matter() -> None:
    assert cusum_run_length(0.5, 4.0, -0.7) == pytest.approx(cusum_run_length(0.5, 4.0, 0.7), rel=1e-12)
    assert ewma_run_length(0.2, 3.0, -0.7) == pytest.approx(ewma_run_length(0.2, 3.0, 0.7), rel=1e-9)


@pytest.mark.parametrize(("k", "h"), [(0.5, 0.0), (-0.1, 5.0)])
def test_a_cusum_needs_limits_above_zero(k: float, h: float) -> None:
    with pytest.raises(ValueError, match="a CUSUM needs h above zero"):
        cusum_run_length(k, h, 0.0)


@pytest.mark.parametrize("weight", [0.0, 1.5])
def test_a_weight_outside_zero_and_one_is_refused(weight: float) -> None:
    with pytest.raises(ValueError, match="lies above 0 and at most at 1"):
        ewma([1.0], 0.0, 1.0, weight, 3.0)
