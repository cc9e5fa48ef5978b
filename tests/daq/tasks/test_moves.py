"""Moves: where the shutter stands while a person turns what only a person may."""

from __future__ import annotations

from dataclasses import replace

import pytest

from daq.description.by_hand import Dial
from daq.estimate import Rules
from daq.tasks.contract import Ask, Turn
from daq.tasks.moves import FreeMask, mask_stage, taken
from daq.tasks.turns import put_attenuator, set_detector
from simulators.clock import VirtualClock
from tests.standins import MemoryBench


class Shutter:
    """A shutter that stands at once as it is asked to."""

    name, armed, stands = "shutter", False, "open"

    def state(self) -> str:
        return self.stands

    def block(self) -> None:
        self.stands = "blocked"

    def unblock(self) -> None:
        self.stands = "open"


@pytest.mark.parametrize(
    ("turn", "meanwhile"),
    [
        (put_attenuator(0.5), "blocked"),
        (set_detector(Dial(now=1000, low=900, high=1100), 950), "open"),
    ],
)
def test_the_beam_is_shut_while_hands_reach_into_it_and_open_for_the_visit(
    turn: Turn, meanwhile: str
) -> None:
    bench, shutter = MemoryBench(VirtualClock(origin_utc_ns=0)), Shutter()
    devices = replace(bench.devices, shutter=shutter)  # type: ignore[arg-type]
    mask = FreeMask(devices.mask, mask_stage(devices, devices.mask), 0.0)
    stood: list[str] = []

    def turned(asked: Turn) -> Turn:
        stood.append(shutter.stands)
        return asked

    asks = [Ask("level", 1.0, 0.0, 7, beam="open", turn=turn)]
    (one,) = taken(asks, devices, mask, bench.sink, bench.clock, None, turned, Rules())

    assert one[0] == asks[0]
    assert (stood, shutter.stands) == ([meanwhile], "open")
