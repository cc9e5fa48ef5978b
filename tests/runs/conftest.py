"""A quick measurement on ports of its own, and its instruments in a process of their own."""

from __future__ import annotations

import socket
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.examples import CONFIGS

PORTS = {"7801": "stages", "7802": "counter", "7803": "room"}


def free_ports(many: int) -> list[int]:
    held = [socket.create_server(("127.0.0.1", 0)) for _ in range(many)]
    ports = [one.getsockname()[1] for one in held]
    for one in held:
        one.close()
    return ports


@pytest.fixture
def measurement(tmp_path: Path) -> Path:
    """Return a measurement of a few seconds on a quick rig, on ports of its own."""
    rig = (CONFIGS / "rigs" / "lantern.toml").read_text()
    for old, new in zip(PORTS, free_ports(3), strict=True):
        rig = rig.replace(f"127.0.0.1:{old}", f"127.0.0.1:{new}")
    for slow, quick in (("settle_s = 0.5", "settle_s = 0.01"), ("settle_s = 0.3", "settle_s = 0.01")):
        rig = rig.replace(slow, quick)
    rig = rig.replace("speed_mm_s = 10.0", "speed_mm_s = 500.0").replace(
        "speed_mm_s = 32.0", "speed_mm_s = 500.0"
    )
    rig = rig.replace("readout_s = 0.1 ", "readout_s = 0.005 ")
    text = (
        (CONFIGS / "lantern.toml")
        .read_text()
        .replace("number = 41", "number = 3")
        .replace("laps = 38", "laps = 4")
    )
    (tmp_path / "rigs").mkdir()
    (tmp_path / "rigs" / "lantern.toml").write_text(rig)
    (tmp_path / "quick.toml").write_text(text.replace("dwell_s = 2.2", "dwell_s = 0.05"))
    return tmp_path / "quick.toml"


@pytest.fixture
def instruments(measurement: Path) -> Iterator[subprocess.Popen[str]]:
    """Serve the rig's instruments from a process of their own."""
    rig = measurement.parent / "rigs" / "lantern.toml"
    process = subprocess.Popen([sys.executable, "-m", "simulators", rig], stdout=subprocess.PIPE, text=True)
    assert process.stdout is not None
    for _ in PORTS:
        assert process.stdout.readline()
    yield process
    process.terminate()
    process.wait(timeout=10)
    process.stdout.close()
