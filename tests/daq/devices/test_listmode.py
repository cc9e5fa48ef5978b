"""List mode behind the counter port: total and events agree, or the gate is in doubt."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

import numpy as np
import pytest

from daq.devices.events import U32
from daq.devices.listmode import ListModeCounter
from daq.errors import DescriptionError, DeviceError
from simulators.bench import build
from simulators.clock import VirtualClock
from simulators.counters import GatedCounter
from simulators.hosts import Host, Instrument, Send, Session, serve
from simulators.listmode import spaced
from simulators.settings import read_settings
from tests.contracts.rigs import events
from tests.daq.devices.scripted import Scripted
from tests.examples import lantern_rig

S = 1_000_000_000


class Changed:
    """A stream whose words a test may change."""

    def __init__(self, inner: Instrument, change: Callable[[bytes], bytes]) -> None:
        self._inner, self._change = inner, change

    def session(self, send: Send) -> Session:
        return self._inner.session(lambda data: send(self._change(data)))


@contextmanager
def wired(
    change: Callable[[bytes], bytes] = lambda data: data,
) -> Iterator[tuple[VirtualClock, ListModeCounter, Scripted, Host]]:
    rig, clock = events(), VirtualClock(0)
    known = {name: {"place_mm": 1.0, "homed": True} for name in rig.axes}
    built = build(rig, read_settings(rig), 1, clock, known)
    line, entry = Scripted(built.instruments["counter"]), rig.devices["counter"]
    assert isinstance(built.instruments["counter"], GatedCounter) and entry.stream is not None
    with serve(clock, entry.address, line):
        stream = serve(clock, entry.stream, Changed(built.streams["counter"], change))
        (device,) = ListModeCounter.of_rig("counter", rig, clock)
        device.open()
        yield clock, device, line, stream
        device.close()
        stream.close()


def test_counts_slices_and_events_are_of_one_gate() -> None:
    with wired() as (_, device, _, _):
        device.arm(2.0)
        counted = device.read()

    times = np.frombuffer(counted.events or b"", "<u8")
    parts = np.array(counted.slices)
    assert tuple(parts.sum(axis=0)) == counted.values == tuple(np.bincount(times % 2))
    assert parts.shape == (10, 2)
    seconds = times / 2 * 1e-9
    assert tuple(np.histogram(seconds[times % 2 == 1], 10, (0, 2.0))[0]) == tuple(parts[:, 1])


def test_an_event_that_is_missing_in_the_stream_puts_the_gate_in_doubt() -> None:
    with wired(lambda data: data[:8] + data[12:]) as (_, device, _, _):
        device.arm(1.0)
        with pytest.raises(DeviceError, match=r"it counted \(.*\) and sent") as doubt:
            device.read()

    assert doubt.value.kind == "garbage"


def test_a_gate_in_which_the_source_lost_events_is_flagged() -> None:
    lost = U32.special(62, 1).to_bytes(4, "little")
    with wired(lambda data: data[:8] + lost + data[12:]) as (_, device, _, _):
        device.arm(1.0)
        counted = device.read()

    assert counted.overflow and counted.events


def test_a_stream_that_breaks_is_a_lost_link_and_opening_again_cures_it() -> None:
    with wired() as (_, device, _, stream):
        device.arm(1.0)
        stream.close()
        with pytest.raises(DeviceError) as lost:
            device.read()
        stream.open()
        device.close()
        device.open()
        device.arm(1.0)

        assert device.read().values[0] > 0
    assert lost.value.kind == "lost"


def test_a_stream_that_nobody_serves_leaves_the_counter_closed() -> None:
    with wired() as (_, device, _, stream):
        device.close()
        stream.close()
        with pytest.raises(DeviceError, match=r"stream on .* nobody answers"):
            device.open()
        with pytest.raises(DeviceError, match="not open"):
            device.arm(1.0)


def test_a_gate_that_is_given_up_sends_no_events() -> None:
    with wired() as (clock, device, _, _):
        device.arm(1.0)
        device.abort()
        clock.sleep_until(clock.now_ns() + 2 * S)
        device.arm(0.5)

        assert device.read().live_s == 0.5


def test_no_two_events_of_a_channel_are_nearer_than_the_dead_time() -> None:
    times = spaced(5000, 0, 10_000_000, 40, np.random.default_rng(1)).astype(np.int64)

    assert len(times) == 5000 and np.diff(times).min() >= 40 and times[-1] < 10_000_000
    # gaps beyond the dead time are exponential: their mean is what is left of the time, shared out
    assert np.diff(times).mean() - 40 == pytest.approx(10_000_000 / 5000 - 40, rel=0.06)


def test_a_stream_and_its_driver_belong_together() -> None:
    with pytest.raises(DescriptionError, match="'list-mode-counter', and no other, needs the address"):
        lantern_rig(devices__counter__stream="tcp://127.0.0.1:7807")
