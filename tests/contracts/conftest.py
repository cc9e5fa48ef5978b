"""Every device behind its port, on a simulated bench in process and over loopback sockets."""

from __future__ import annotations

from collections.abc import Iterator

import pytest

from daq.devices.registry import open_devices
from daq.ports import Devices
from simulators.bench import WaveletBench, open_bench
from tests.examples import lantern_rig


@pytest.fixture(params=["direct", "tcp"])
def bench(request: pytest.FixtureRequest) -> Iterator[WaveletBench]:
    bench = open_bench(lantern_rig(), seed=3, transport=request.param, state=None)
    yield bench
    bench.close()


@pytest.fixture
def devices(bench: WaveletBench) -> Iterator[Devices]:
    """Give the devices of the Lantern bench, opened, not homed."""
    with open_devices(lantern_rig(), bench.clock) as devices:
        yield devices
