"""What every shutter promises."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from daq.devices.registry import open_devices
from daq.errors import DeviceError
from daq.ports import Devices, Shutter
from simulators.bench import WaveletBench, open_bench
from tests.contracts.rigs import words

S = 1_000_000_000


@pytest.fixture
def bench() -> Iterator[WaveletBench]:
    bench = open_bench(words(), seed=3, transport="direct", state=None)
    yield bench
    bench.close()


@pytest.fixture
def devices(bench: WaveletBench) -> Iterator[Devices]:
    with open_devices(words(), bench.clock) as devices:
        yield devices


@pytest.fixture
def shutter(devices: Devices) -> Shutter:
    assert devices.shutter is not None
    return devices.shutter


class TestShutter:
    """The promises of `daq.ports.Shutter`."""

    def test_it_lets_nothing_pass_unless_armed(self, shutter: Shutter) -> None:
        with pytest.raises(DeviceError, match="nothing is armed") as refusal:
            shutter.unblock()

        assert (refusal.value.kind, shutter.state()) == ("refused", "blocked")

    def test_armed_it_opens_and_blocks_again(self, shutter: Shutter, bench: WaveletBench) -> None:
        shutter.armed = True  # type: ignore[attr-defined]
        states = [shutter.state()]
        for move in (shutter.unblock, shutter.block):
            move()
            states.append(shutter.state())
            bench.clock.sleep_until(bench.clock.now_ns() + S)
            states.append(shutter.state())

        assert states == ["blocked", "moving", "open", "moving", "blocked"]

    def test_a_blocked_beam_leaves_dark_counts(
        self, shutter: Shutter, devices: Devices, bench: WaveletBench
    ) -> None:
        shutter.armed = True  # type: ignore[attr-defined]
        for stage in devices.stages:
            stage.home()
        devices.mask.show(7)
        counts = []
        for move in (shutter.block, shutter.unblock):
            move()
            bench.clock.sleep_until(bench.clock.now_ns() + S)
            devices.counter.arm(2.0)
            counts.append(devices.counter.read().values[0])

        assert counts[0] < 100 + 6 * 10 < counts[1]  # 50 dark counts a second, six standard errors
