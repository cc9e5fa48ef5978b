"""`python -m simulators RIG`: the same instruments on real ports and the real clock."""

from __future__ import annotations

import signal
import subprocess
import sys
import threading
from collections.abc import Iterator
from pathlib import Path

import pytest

from daq.description import Rig
from daq.devices.clock import RealClock
from daq.devices.registry import open_devices
from simulators.__main__ import main
from tests.examples import CONFIGS, lantern_rig

PATIENCE_S = 30.0
RIG = (CONFIGS / "rigs" / "lantern.toml").read_text()


@pytest.fixture
def process(tmp_path: Path) -> Iterator[subprocess.Popen[str]]:
    """Run the bench on free ports; ended for certain when the test is over."""
    file = tmp_path / "rig.toml"
    file.write_text(RIG.replace(":7801", ":0").replace(":7802", ":0").replace(":7803", ":0"))
    command = [sys.executable, "-m", "simulators", str(file)]
    with subprocess.Popen(command, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True) as process:
        end = threading.Timer(PATIENCE_S, process.kill)
        end.start()
        yield process
        end.cancel()
        process.kill()


def rig_at(process: subprocess.Popen[str]) -> Rig:
    """Return the Lantern rig at the addresses that the process prints."""
    assert process.stdout is not None
    printed = dict(process.stdout.readline().strip().split(": ") for _ in range(3))
    return lantern_rig(**{f"devices__{name}__address": address for name, address in printed.items()})


def test_the_drivers_work_with_real_ports_and_the_real_clock(process: subprocess.Popen[str]) -> None:
    clock = RealClock()
    with open_devices(rig_at(process), clock) as devices:
        for stage in devices.stages:
            stage.home()
        clock.sleep_until(clock.now_ns() + round(devices.mask.show(1) * 1e9))
        devices.counter.arm(0.2)
        counted = devices.counter.read()

        assert devices.mask.state()["mask"].encoder_mm == 2.0
        assert counted.live_s == 0.2 and counted.values[0] > 0
        assert set(devices.sensors[0].read()) == {"temperature", "pressure"}


@pytest.mark.parametrize("number", [signal.SIGTERM, signal.SIGINT])
def test_it_ends_well_at_a_signal(process: subprocess.Popen[str], number: signal.Signals) -> None:
    rig_at(process)

    process.send_signal(number)

    assert process.wait(PATIENCE_S) == 0
    assert process.stderr is not None and process.stderr.read() == ""


def test_a_taken_port_is_a_sentence(process: subprocess.Popen[str], tmp_path: Path) -> None:
    rig = rig_at(process)
    taken = rig.devices["counter"].address.rpartition(":")[2]
    file = tmp_path / "second.toml"
    file.write_text(RIG.replace(":7801", ":0").replace(":7802", f":{taken}").replace(":7803", ":0"))

    second = subprocess.run(
        [sys.executable, "-m", "simulators", str(file)],
        capture_output=True,
        text=True,
        timeout=PATIENCE_S,
        check=False,
    )

    assert second.returncode == 2
    assert "cannot be listened on" in second.stderr and "Traceback" not in second.stderr


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("schema = ", "cannot be read as TOML"),
        (RIG.split("\n[bench]")[0], "no table [bench]"),
        ("", "missing"),
    ],
)
def test_a_rig_that_cannot_be_simulated_is_a_sentence(
    tmp_path: Path, capsys: pytest.CaptureFixture[str], text: str, said: str
) -> None:
    file = tmp_path / "rig.toml"
    file.write_text(text)

    status = main([str(file)])

    assert (status, said in capsys.readouterr().err) == (2, True)


def test_a_rig_that_is_not_there_is_a_sentence(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["nowhere.toml"]) == 2
    assert "nowhere.toml" in capsys.readouterr().err
