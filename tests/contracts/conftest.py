"""Every device behind its port, on simulated benches in process and over loopback sockets."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from daq.description import Rig
from daq.devices.registry import open_devices
from daq.ports import Devices
from simulators.bench import WaveletBench, open_bench
from tests.contracts.rigs import RIGS


@pytest.fixture(
    params=[
        "lantern-direct",
        "lantern-tcp",
        "sliced-direct",
        "events-direct",
        "events-tcp",
        "words-direct",
        "scpi-direct",
    ]
)
def case(request: pytest.FixtureRequest) -> str:
    return str(request.param)


@pytest.fixture
def rig(case: str) -> Rig:
    return RIGS[case.partition("-")[0]]()


@pytest.fixture
def bench(case: str, rig: Rig) -> Iterator[WaveletBench]:
    bench = open_bench(rig, seed=3, transport="tcp" if case.endswith("tcp") else "direct", state=None)
    yield bench
    bench.close()


@pytest.fixture
def devices(bench: WaveletBench, rig: Rig) -> Iterator[Devices]:
    """Give the devices of a bench, opened, not homed; a shutter is open."""
    with open_devices(rig, bench.clock) as devices:
        if devices.shutter is not None:
            devices.shutter.armed = True  # type: ignore[attr-defined]
            devices.shutter.unblock()
            bench.clock.sleep_until(1_000_000_000)
        yield devices
