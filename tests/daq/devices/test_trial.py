"""Trying a dialect: everything that only asks is asked, and told as it was understood."""

from __future__ import annotations

import json
import threading
from collections.abc import Iterator

import pytest

from daq.cli import main
from daq.devices.clock import RealClock
from simulators.gauge import Gauge
from simulators.hosts import Listener, run_real
from simulators.motion import Track
from simulators.stages import StageController, Travel
from tests.daq.devices.scripted import Scripted
from tests.examples import CONFIGS


@pytest.fixture
def places() -> Iterator[dict[str, str]]:
    clock = RealClock()
    stages = StageController({"X": Track(1.0, 0.0, homed=True)}, {"X": Travel((0.0, 20.0), 10.0)}, clock)
    scripted = Scripted(stages)
    listeners = {
        "stages": Listener("tcp://127.0.0.1:0", scripted),
        "gauge": Listener("tcp://127.0.0.1:0", Gauge("lantern", clock)),
    }
    stop = threading.Event()
    thread = threading.Thread(target=run_real, args=(list(listeners.values()), stop))
    thread.start()
    yield {name: one.address.removeprefix("tcp://") for name, one in listeners.items()}
    stop.set()
    thread.join()
    assert {message.split()[0] for message in scripted.sent} <= {"M100", "M101", "who"}  # nothing that moves


def told(capsys: pytest.CaptureFixture[str], dialect: str, place: str) -> tuple[int, dict[str, list[str]]]:
    status = main(["check", str(CONFIGS / "dialects" / f"{dialect}.toml"), "--try", place, "--json"])
    return status, json.loads(capsys.readouterr().out)


def test_a_stage_is_asked_where_it_is(places: dict[str, str], capsys: pytest.CaptureFixture[str]) -> None:
    status, answer = told(capsys, "gcode-words", places["stages"])

    assert status == 0
    identity, state = answer["understood"]
    assert identity == "identity: 'tercet-stages 1 axes X'"
    assert "encoder = 1.0000" in state and state.endswith("holds: homed_when")


def test_a_gauge_is_read(places: dict[str, str], capsys: pytest.CaptureFixture[str]) -> None:
    status, answer = told(capsys, "text-gauge", places["gauge"])

    assert status == 0
    assert "pressure = 2.000E-05" in answer["understood"][1]


def test_the_wrong_device_is_said_to_be_one(
    places: dict[str, str], capsys: pytest.CaptureFixture[str]
) -> None:
    status = main(["check", str(CONFIGS / "dialects" / "text-gauge.toml"), "--try", places["stages"]])

    assert status == 3
    assert "the identity is 'refused 1 not a line of words'" in capsys.readouterr().err


def test_only_a_dialect_is_tried(capsys: pytest.CaptureFixture[str]) -> None:
    status = main(["check", str(CONFIGS / "lantern.toml"), "--try", "127.0.0.1:1"])

    assert status == 2
    assert "only a dialect can be tried" in capsys.readouterr().err
