"""What every counter promises."""

from __future__ import annotations

import math

import numpy as np
import pytest

from daq.description import Rig
from daq.errors import DeviceError
from daq.ports import Clock, Counter, Devices
from simulators.bench import WaveletBench
from tests.examples import lantern_rig

S = 1_000_000_000
READOUT_S = lantern_rig().devices["counter"].readout_s


@pytest.fixture
def counter(devices: Devices) -> Counter:
    return devices.counter


@pytest.fixture
def clock(bench: WaveletBench) -> Clock:
    return bench.clock


class TestCounter:
    """The promises of `daq.ports.Counter`."""

    def test_the_gate_is_open_for_the_dwell(self, counter: Counter, clock: Clock) -> None:
        idle = counter.busy()

        counter.arm(2.2)

        assert (idle, counter.busy()) == (False, True)
        clock.sleep_until(clock.now_ns() + 2_199_999_999)
        assert counter.busy()
        clock.sleep_until(clock.now_ns() + 1)
        assert not counter.busy()

    def test_reading_waits_for_what_is_left_of_gate_and_readout(
        self, counter: Counter, clock: Clock, rig: Rig
    ) -> None:
        counter.arm(1.5)
        begun_ns = clock.now_ns()

        counted = counter.read()

        assert clock.now_ns() == begun_ns + round((1.5 + READOUT_S) * S)
        assert (counted.live_s, counted.overflow) == (1.5, False)
        assert len(counted.values) == rig.devices["counter"].channels
        assert all(value > 0 and isinstance(value, int) for value in counted.values)

    def test_the_parts_of_a_gate_add_up_to_its_count(self, counter: Counter, rig: Rig) -> None:
        counter.arm(1.5)

        counted = counter.read()

        parts = counted.slices or ()
        assert len(parts) == rig.slices
        assert not parts or tuple(map(sum, zip(*parts, strict=True))) == counted.values

    def test_a_counter_in_list_mode_gives_every_event(self, counter: Counter, rig: Rig) -> None:
        counter.arm(1.5)

        counted = counter.read()

        mode = rig.list_mode
        assert (counted.events is None) == (mode is None)
        if mode is not None:
            times, channels = np.frombuffer(counted.events or b"", "<u8"), int(mode["channels"])
            assert tuple(np.bincount(times % channels)) == counted.values
            assert (np.diff(times.astype(np.int64)) >= 0).all()
            assert float(times[-1]) * mode["tick_s"] < 1.5 + 1e-6

    def test_reading_late_waits_no_more_and_gives_the_same_twice(
        self, counter: Counter, clock: Clock
    ) -> None:
        counter.arm(1.0)
        late_ns = clock.now_ns() + 5 * S
        clock.sleep_until(late_ns)

        counts = [counter.read(), counter.read()]

        assert counts[0] == counts[1]
        assert clock.now_ns() == late_ns

    def test_nothing_armed_is_nothing_to_read(self, counter: Counter) -> None:
        with pytest.raises(DeviceError, match="no gate to read"):
            counter.read()

    def test_an_aborted_gate_cannot_be_read_and_the_next_one_can(self, counter: Counter) -> None:
        counter.arm(1.0)

        counter.abort()

        assert not counter.busy()
        with pytest.raises(DeviceError, match="no gate to read"):
            counter.read()
        counter.arm(0.5)
        assert counter.read().live_s == 0.5

    @pytest.mark.parametrize("dwell_s", [0.0, -1.0, math.nan, math.inf, 1e-9, 1e9])
    def test_a_gate_that_cannot_be_counted_is_refused_and_the_next_one_is_not(
        self, counter: Counter, dwell_s: float
    ) -> None:
        with pytest.raises(DeviceError) as refusal:
            counter.arm(dwell_s)

        assert refusal.value.kind == "refused"
        counter.arm(1.0)
        assert counter.read().live_s == 1.0

    def test_arming_again_forgets_the_gate_before(self, counter: Counter, clock: Clock) -> None:
        counter.arm(5.0)
        clock.sleep_until(clock.now_ns() + S)

        counter.arm(0.25)

        assert counter.read().live_s == 0.25
