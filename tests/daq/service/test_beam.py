"""The beam: a run opens the shutter that it was given, and shuts it at its end."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace

import pytest

from daq.devices.registry import open_devices
from daq.errors import DeviceError
from daq.ports import Devices
from daq.service.beam import PATIENCE_S, let_in, shut_out, shut_out_after
from simulators.bench import WaveletBench, open_bench
from tests.contracts.rigs import words
from tests.examples import lantern_rig

S = 1_000_000_000


@contextmanager
def shuttered() -> Iterator[tuple[WaveletBench, Devices]]:
    bench = open_bench(words(), seed=1, transport="direct", state=None)
    with open_devices(words(), bench.clock) as devices:
        yield bench, devices
    bench.close()


def counts(bench: WaveletBench, devices: Devices) -> float:
    devices.counter.arm(1.0)
    return devices.counter.read().values[0]


def test_light_is_let_in_for_a_run_and_shut_out_after_it() -> None:
    with shuttered() as (bench, devices):
        for stage in devices.stages:
            stage.home()
        bench.clock.sleep_until(bench.clock.now_ns() + round(devices.mask.show(7) * 1e9))
        before = counts(bench, devices)
        let_in(devices, bench.clock)
        open_ = counts(bench, devices)
        shut_out(devices)
        after = counts(bench, devices)

    assert max(before, after) < 150 < 1000 < open_


def test_light_is_shut_out_however_a_block_ends() -> None:
    with shuttered() as (bench, devices):
        assert devices.shutter is not None
        with pytest.raises(KeyboardInterrupt), shut_out_after(devices):
            let_in(devices, bench.clock)
            open_ = devices.shutter.state()
            raise KeyboardInterrupt
        bench.clock.sleep_until(bench.clock.now_ns() + S)

        assert (open_, devices.shutter.state()) == ("open", "blocked")


def test_a_shutter_that_was_shut_out_is_not_opened_by_anybody_else() -> None:
    with shuttered() as (bench, devices):
        let_in(devices, bench.clock)
        shut_out(devices)

        assert devices.shutter is not None
        with pytest.raises(DeviceError, match="nothing is armed"):
            devices.shutter.unblock()


class Stuck:
    """A shutter that never opens."""

    name, armed = "shutter", False

    def unblock(self) -> None:
        self.asked = True

    def state(self) -> str:
        return "moving"


def test_a_shutter_that_does_not_open_ends_the_wait_with_a_sentence() -> None:
    with shuttered() as (bench, devices):
        stuck_one = replace(devices, shutter=Stuck())  # type: ignore[arg-type]
        began_ns = bench.clock.now_ns()

        with pytest.raises(DeviceError, match="the shutter has not opened in 10 s") as stuck:
            let_in(stuck_one, bench.clock)

    assert stuck.value.kind == "timeout"
    assert bench.clock.now_ns() - began_ns < (PATIENCE_S + 1) * S


def test_a_rig_without_a_shutter_has_nothing_to_do() -> None:
    bench = open_bench(lantern_rig(), seed=1, transport="direct", state=None)
    with open_devices(lantern_rig(), bench.clock) as devices:
        let_in(devices, bench.clock)
        shut_out(devices)

        assert devices.shutter is None
    bench.close()
