"""By hand: what a person at the bench may do, and what is refused with nothing sent."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager

import pytest

from daq.description import Rig
from daq.devices.registry import open_devices
from daq.errors import DaqError, DeviceError
from daq.service.at_bench import refuse_absent
from daq.tasks.by_hand import COMMANDS, HELP, Bench, halt, obey
from simulators.bench import WaveletBench, open_bench
from tests.contracts.rigs import sliced, words
from tests.examples import lantern_rig

S = 1_000_000_000


@contextmanager
def in_hand(
    rig: Rig | None = None, over: Callable[[], bool] = lambda: False, watched: bool = True
) -> Iterator[tuple[WaveletBench, Bench]]:
    rig = rig or lantern_rig()
    bench = open_bench(rig, seed=1, transport="direct", state=None)
    with open_devices(rig, bench.clock) as devices:
        yield bench, Bench(devices, bench.clock, over, watched)
    bench.close()


def said(bench: Bench, *lines: str) -> list[str]:
    return [text for line in lines for text in obey(bench, line)]


def test_an_axis_is_homed_moved_and_asked() -> None:
    with in_hand() as (_, bench):
        told = said(bench, "where", "home", "go detector 3.2", "go AB", "where")

    assert "no reference: home it" in told[0]
    assert told[-2:] == ["mask 4.0000 mm (still)", "detector 3.2000 mm (still)"]


def test_an_axis_without_reference_is_not_moved() -> None:
    with in_hand() as (truth, bench):
        before_mm = truth.truth_mm("detector")
        with pytest.raises(DeviceError, match=r"has no reference and is not moved.* `home detector`"):
            said(bench, "go detector 1")
        with pytest.raises(DeviceError, match="has no reference"):
            said(bench, "go ABC")

        assert truth.truth_mm("detector") == before_mm


def test_limits_hold() -> None:
    with in_hand() as (truth, bench):
        said(bench, "home")
        before_mm = truth.truth_mm("detector")

        for place in ("99", "-15.001", "nan", "inf"):
            with pytest.raises(DeviceError, match=r"leaves -15 \.\. 15 mm; not sent"):
                said(bench, f"go detector {place}")

        assert truth.truth_mm("detector") == before_mm


@pytest.mark.parametrize(
    ("line", "why"),
    [
        ("fly", "no 'fly' here"),
        ("go", "say `go AXIS MM`"),
        ("go detector", "no opening 'detector'"),
        ("go BA", "no opening 'BA'"),
        ("go D", "no opening 'D'"),
        ("go mirror 1", "no axis 'mirror'; there is mask, detector"),
        ("go detector far", "'far' is not a place in mm"),
        ("home mirror", "no axis 'mirror'"),
        ("read 0", "0 is not seconds above 0"),
        ("read nan", "nan is not seconds above 0"),
        ("read 1 2", "'2' is one word too many"),
        ("where now", "'now' is one word too many"),
        ("shutter open", "no shutter"),
    ],
)
def test_a_line_that_cannot_be_meant_says_why(line: str, why: str) -> None:
    with in_hand() as (_, bench), pytest.raises(DaqError) as refusal:
        said(bench, "home", line)

    assert why in str(refusal.value) and "nothing was sent" in str(refusal.value)


def test_a_reading_gives_every_channel_with_its_error() -> None:
    with in_hand(sliced()) as (_, bench):
        said(bench, "home", "go none", "go detector 0")

        detector, monitor = said(bench, "read 4")

    assert detector.startswith("channel 0: 3") and "in 4 s, 8" in detector
    assert monitor.startswith(("channel 1: 39", "channel 1: 40"))


def test_the_rate_is_shown_gate_by_gate_over_itself_until_somebody_has_seen_enough() -> None:
    looks = iter([False] * 4 + [True])
    with in_hand(over=lambda: next(looks)) as (truth, bench):
        said(bench, "home", "go ABC", "go detector 0")
        began_ns = truth.clock.now_ns()

        told = said(bench, "rate 0.5")

        assert len(told) == 4
        assert not told[0].startswith("\r") and all(line.startswith("\r") for line in told[1:])
        assert all("/s" in line and "#" * 18 in line for line in told)
        assert truth.clock.now_ns() - began_ns == pytest.approx(4 * 0.6 * S, rel=0.01)


def test_the_rate_ends_by_itself_when_nobody_can_end_it_or_a_time_was_said() -> None:
    with in_hand(watched=False) as (_, bench):
        assert len(said(bench, "rate 1")) == 10  # a gate takes 1.1 s with its readout
        assert len(said(bench, "rate 0.5 2")) == 4


def test_the_rate_follows_the_light() -> None:
    with in_hand() as (_, bench):
        said(bench, "home", "go ABC", "go detector 0")
        bright = said(bench, "read 1")[0]
        said(bench, "go none")
        dim = said(bench, "read 1")[0]

    assert float(bright.split(" in ")[0].split(": ")[1]) > 100 * float(dim.split(" in ")[0].split(": ")[1])


def test_sensors_and_shutter_by_hand() -> None:
    with in_hand(words()) as (truth, bench):
        closed = said(bench, "shutter", "shutter open")
        truth.clock.sleep_until(truth.clock.now_ns() + S)
        opened, sensors = said(bench, "shutter"), said(bench, "sensors")

    assert closed[0] == "the shutter is blocked (no safety function)"
    assert opened == ["the shutter is open (no safety function)"]
    assert any(line.startswith("gauge_") for line in sensors)


def test_halt_stops_an_axis_under_way_and_forgets_the_gate() -> None:
    with in_hand() as (truth, bench):
        said(bench, "home")
        bench.stages["detector"].start(10.0)
        bench.devices.counter.arm(5.0)
        truth.clock.sleep_until(truth.clock.now_ns() + 100_000_000)

        told = list(halt(bench))

        assert not bench.stages["detector"].state().moving
        assert truth.truth_mm("detector") < 10.0
        assert not bench.devices.counter.busy()
        assert "look whether they did" in told[-1]


def test_an_alarm_is_said_and_nothing_is_moved() -> None:
    rig = lantern_rig()
    script = {"fault": [{"kind": "alarm", "device": "stages", "at_s": 100.0, "text": "door"}]}
    bench = open_bench(rig, seed=1, transport="direct", state=None, faults=script)
    with open_devices(rig, bench.clock) as devices:
        hand = Bench(devices, bench.clock)
        said(hand, "home")
        bench.clock.sleep_until(101 * S)

        assert "ALARM door" in said(hand, "where")[0]
        with pytest.raises(DeviceError, match="alarm door"):
            said(hand, "go detector 1")
    bench.close()


def test_a_place_that_the_encoder_does_not_show_is_said() -> None:
    rig = lantern_rig()
    script = {"fault": [{"kind": "slip", "axis": "detector", "at_s": 100.05, "size_mm": 0.5}]}
    bench = open_bench(rig, seed=1, transport="direct", state=None, faults=script)
    with open_devices(rig, bench.clock) as devices:
        hand = Bench(devices, bench.clock)
        said(hand, "home")
        bench.clock.sleep_until(100 * S)

        (told,) = said(hand, "go detector 8")
    bench.close()

    assert "+0.5000 mm off" in told


def test_every_command_is_explained() -> None:
    explained = {line.split()[0] for line in HELP}

    assert explained == (set(COMMANDS) | {"end"}) - {"help"}


@pytest.mark.parametrize("typed", ["", "yes\n", "Here\n"])
def test_real_devices_are_opened_only_when_somebody_says_to_be_there(typed: str) -> None:
    with pytest.raises(DaqError, match="nobody has said to be at the bench"):
        refuse_absent(lantern_rig(bench=None), lambda question: typed)


def test_somebody_who_is_there_has_read_the_cautions() -> None:
    shown: list[str] = []

    def types(question: str) -> str:
        shown.append(question)
        return "here\n"

    refuse_absent(lantern_rig(bench=None), types)

    assert "no emergency stop" in shown[0]
    refuse_absent(lantern_rig(), lambda question: "never asked")
