"""Flanks: what clipping takes, and how far a window stands aside by the counts on both."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import norm

from daq.tasks.flanks import balance_mm, clipped, ramp_mm
from daq.tasks.windows import window
from simulators.chip import Chip
from simulators.motion import Leg
from simulators.settings import ChipSettings
from tests.examples import lantern_rig

EDGE_MM = 0.1


@pytest.mark.parametrize("loss", [1e-5, 1e-4, 1e-3, 1e-2])
def test_what_clipping_takes_is_what_a_simulated_stage_loses_to_a_tenth(loss: float) -> None:
    """The study `tasks` has it to half a hundredth."""
    random, edge_mm, repeat = np.random.default_rng(4), 0.04, 0.02
    offset_mm = 0.6 - norm.isf(loss) * np.hypot(edge_mm, repeat)
    stands = offset_mm + repeat * random.standard_normal(400_000)
    lost = 1.0 - window(stands, np.array([0.0, 1.0, -0.6, 0.6, edge_mm]))

    said = clipped(offset_mm, 1.2, edge_mm, repeat)

    assert said == pytest.approx(loss, rel=1e-6)
    assert lost.std() / np.sqrt(len(lost)) < 0.025 * said
    assert lost.mean() == pytest.approx(said, rel=0.10)


@pytest.mark.parametrize("loss", [1e-5, 1e-4, 1e-3, 1e-2])
def test_what_clipping_takes_is_what_the_chip_of_the_bench_takes_to_a_tenth(loss: float) -> None:
    """The bench has windows of its own (simulators.chip), which share nothing with those that are fitted."""
    edge_mm, repeat, drawn_mm = 0.04, 0.01, 2.0
    chip = Chip(lantern_rig(), ChipSettings(window_mm=1.2, edge_mm=edge_mm, repeat_mm=repeat), seed=3)
    offset_mm = 0.6 - norm.isf(loss) * np.hypot(edge_mm, repeat)
    legs = [Leg(start_ns, start_ns + 1, 0.0, drawn_mm) for start_ns in range(20_000)]

    passed = [dict(chip.shares(drawn_mm + offset_mm + chip.off_mm(leg)))[1] for leg in legs]

    lost = 1.0 - np.array(passed)
    assert lost.std() / np.sqrt(len(lost)) < 0.025 * loss
    assert lost.mean() == pytest.approx(clipped(offset_mm, 1.2, edge_mm, repeat), rel=0.10)


def test_the_balance_of_two_flanks_says_how_far_a_window_is_off_and_how_well_that_is_known() -> None:
    random, ramp, plateau, off_mm = np.random.default_rng(5), ramp_mm(EDGE_MM), 50_000, 0.004
    truth = np.array([0.0, plateau, -0.5 + off_mm, 0.5 + off_mm, EDGE_MM])
    left, right = (random.poisson(window(np.array([at]), truth)[0], 2000) for at in (-0.5, 0.5))

    found = np.array([balance_mm(float(a), float(b), ramp) for a, b in zip(left, right, strict=True)])

    assert found[:, 0].mean() == pytest.approx(off_mm, rel=0.02)
    assert found[:, 0].std() == pytest.approx(found[:, 1].mean(), rel=4 / np.sqrt(2 * 2000))
