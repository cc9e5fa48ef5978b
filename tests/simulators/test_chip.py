"""Chip: windows pass what they should, and the mask stands where its play leaves it."""

from __future__ import annotations

import numpy as np
import pytest

from simulators.chip import Chip
from simulators.motion import NS, Leg
from simulators.settings import ChipSettings
from tests.examples import lantern_rig

AB, KEY = 3, 7


def chip(**settings: object) -> Chip:
    return Chip(lantern_rig(), ChipSettings(window_mm=1.2, **settings), seed=1)  # type: ignore[arg-type]


def passes(one: Chip, mask_mm: float) -> dict[int, float]:
    return dict(one.shares(mask_mm))


def test_a_window_passes_all_in_its_middle_half_on_its_edge_and_nothing_between() -> None:
    assert passes(chip(), 4.0) == {AB: 1.0}
    assert passes(chip(), 3.4)[AB] == pytest.approx(0.5)
    assert passes(chip(), 5.0) == {}


def test_a_chip_is_off_and_turned_round_about_its_own_middle() -> None:
    assert passes(chip(off_mm={"AB": 0.1}, offset_mm=0.2), 4.3) == {AB: 1.0}
    assert passes(chip(mirrored=True), 2.0) == {KEY: 1.0}  # 2.0 + 18.4 less 18.4
    assert AB not in passes(chip(missing=("AB",)), 4.0)


def test_play_goes_with_the_last_move_and_chance_with_its_start() -> None:
    up, down, stays = Leg(1, 2, 0.0, 4.0), Leg(3, 4, 9.0, 4.0), Leg(0, 0, 4.0, 4.0)
    one = chip(backlash_mm=0.01)

    assert (one.off_mm(up), one.off_mm(down), one.off_mm(stays)) == (0.005, -0.005, 0.0)
    scattered = np.array([chip(repeat_mm=0.002).off_mm(Leg(at, at + 1, 0.0, 4.0)) for at in range(2000)])
    assert scattered.std() == pytest.approx(0.002, rel=4 / np.sqrt(2 * 2000))


def test_a_transient_fades_after_a_move_and_gives_its_mean_over_a_gate() -> None:
    one, leg = chip(transient=0.1, transient_s=0.5), Leg(0, NS, 0.0, 4.0)

    mean = one.transient(leg, NS, 2 * NS)

    time_s = np.linspace(0, 1, 20_001)
    assert mean == pytest.approx(1 + 0.1 * float(np.trapezoid(np.exp(-time_s / 0.5), time_s)), rel=1e-6)
    assert one.transient(leg, 20 * NS, 21 * NS) == pytest.approx(1.0, abs=1e-12)
