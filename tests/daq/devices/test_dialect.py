"""Dialects: files that are refused, warned of, and carried out."""

from __future__ import annotations

import copy
import re
import tomllib
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from daq.description import Dialect, parse
from daq.description.device import DeviceEntry
from daq.description.dialect import dialect_warnings
from daq.description.patterns import pattern_problem, shared_text
from daq.description.rig import Axis
from daq.devices.dialect import DialectSensor, DialectStage
from daq.devices.dialect_counter import DialectCounter
from daq.devices.files import with_dialects
from daq.devices.rollover import counted_between, longest_s
from daq.devices.spoken import Spoken, number
from daq.devices.stage import SharedLink
from daq.errors import DescriptionError, DeviceError
from simulators.clock import VirtualClock
from simulators.gauge import Gauge
from simulators.hosts import Instrument, serve
from simulators.motion import Track
from simulators.scpi_stage import ScpiStage
from simulators.stages import Travel
from simulators.totalisers import FrequencyMeter, Totaliser
from tests.daq.devices.scripted import Scripted
from tests.examples import CONFIGS, changed, rig_table

S = 1_000_000_000
FILES = sorted((CONFIGS / "dialects").glob("*.toml"))
ADDRESS = "tcp://127.0.0.1:7801"


def table(name: str) -> dict[str, Any]:
    return tomllib.loads((CONFIGS / "dialects" / f"{name}.toml").read_text())


def dialect(name: str, **changes: Any) -> Dialect:
    return parse(changed(table(name), **changes), f"{name}.toml", "dialect")


def without(name: str, *path: str) -> dict[str, Any]:
    less = copy.deepcopy(table(name))
    inner = less
    for key in path[:-1]:
        inner = inner[key]
    del inner[path[-1]]
    return less


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.stem)
def test_every_shipped_dialect_is_without_problem_and_without_warning(path: Path) -> None:
    read = parse(tomllib.loads(path.read_text()), path.name, "dialect")

    assert dialect_warnings(read) == ()


NESTED = "a repeat inside a repeat"


@pytest.mark.parametrize(
    ("changes", "key", "why"),
    [
        ({"command__move__send": "G1 {letter.__class__}{position}"}, "move.send", "braces hold the name"),
        ({"command__move__send": "G1 {position:.4f}"}, "move.send", "braces hold the name"),
        ({"command__move__send": "G1 X{position} F{feed}"}, "move.send", "no field 'feed' here"),
        ({"command__move__send": "G1 X4.0"}, "move.send", "has to send {position}"),
        ({"command__move__send": "G1 X{position}\nM3"}, "move.send", "one line of printable"),
        ({"command__move__reply": "(t+)+aken"}, "move.reply", NESTED),
        ({"command__move__reply": "(?:t|taken)*"}, "move.reply", "a choice inside a repeat"),
        ({"command__move__reply": "(?=taken)taken"}, "move.reply", "assert is not allowed"),
        ({"command__move__reply": "(taken"}, "move.reply", "no regular expression"),
        ({"command__stop__safe_to_repeat": True}, "stop.safe_to_repeat", "never sent twice"),
        ({"command__stop__reply": "taken"}, "stop.reply", "no reply to it is awaited"),
        ({"command__status__reply": r"(?P<place>\d+)"}, "status.reply", "needs a group named 'encoder'"),
        ({"command__status__busy_when__group": "moves"}, "status.busy_when", "no group 'moves'"),
        ({"command__status__busy_when__mask": 1}, "status.busy_when", "say one of any_of"),
        ({"command__jog": {"send": "J"}}, "command.jog", "a stage has no such command"),
        ({"command__move__sned": "G1"}, "move.sned", "Did you mean 'send'"),
        ({"identity__reply": r"\d+"}, "identity.reply", "would pass for the identity"),
        ({"axis__decimals": 12}, "axis.decimals", "less than or equal to 9"),
        ({"axis__device_per_mm": float("nan")}, "axis.device_per_mm", "finite"),
        ({"link__late_s": -1.0}, "link.late_s", "greater than or equal to 0"),
        ({"counter": {"mode": "gated"}}, "counter", "a stage has no use for this table"),
        ({"schema": 2}, "schema", "should be 1"),
    ],
)
def test_an_unsafe_or_ambiguous_stage_file_is_refused(changes: dict[str, Any], key: str, why: str) -> None:
    with pytest.raises(DescriptionError) as refusal:
        dialect("gcode-words", **changes)

    assert any(key in problem and why in problem for problem in refusal.value.problems), refusal.value


@pytest.mark.parametrize("command", ["stop", "status", "home", "move"])
def test_a_stage_needs_its_commands(command: str) -> None:
    with pytest.raises(DescriptionError, match=rf"command.{command}: a stage needs this command"):
        parse(without("gcode-words", "command", command), "x.toml", "dialect")


def test_arming_is_never_sent_twice() -> None:
    with pytest.raises(DescriptionError, match="never sent twice"):
        dialect("scpi-frequency", command__arm__safe_to_repeat=True)


def test_a_silent_setter_needs_a_confirmation() -> None:
    with pytest.raises(DescriptionError, match="needs a reply, or the dialect a table"):
        parse(without("scpi-stage", "confirm"), "x.toml", "dialect")


def test_a_running_totaliser_says_where_it_rolls_over() -> None:
    with pytest.raises(DescriptionError, match="needs bits"):
        parse(without("scpi-totaliser", "counter", "bits"), "x.toml", "dialect")


def test_quantities_are_the_groups_of_the_reply() -> None:
    with pytest.raises(DescriptionError, match="'temperature' stands in only one of"):
        dialect("text-gauge", quantity__temperature={"unit": "K"})


def test_two_replies_that_can_be_the_same_text_are_warned_of() -> None:
    ambiguous = dialect("scpi-frequency", command__fetch__reply=r"(?P<value>\d+)")

    (warning,) = dialect_warnings(ambiguous)

    assert "command.status and command.fetch can be the same text, for example '0'" in warning


@pytest.mark.parametrize(
    ("one", "other", "shared"),
    [
        (r"\d+", "[01]", "0"),
        ("ok", r"\d+", None),
        (r"BUSY|\d{3}", r"\w{4}", "BUSY"),
        (r"[^,]+,x", r"a?b{2,3},.", "bb,x"),
        (r"(?P<a>\d+),(?P<b>\d+)", r"\d+", None),
        ("a{3,}", "a{2}", None),
        ("^ready$", "ready", "ready"),
        (r"\D", r"\S", "!"),
    ],
)
def test_a_text_that_two_patterns_share_is_found_if_there_is_one(
    one: str, other: str, shared: str | None
) -> None:
    found = shared_text(one, other)

    assert (found is None) == (shared is None)
    if found is not None and shared is not None:
        assert len(found) == len(shared)
        assert re.fullmatch(one, found) and re.fullmatch(other, found)


def test_a_back_reference_is_no_reply_pattern() -> None:
    assert "not allowed" in (pattern_problem(r"(a)\1") or "")


def test_an_axis_finer_than_its_dialect_can_send_is_refused() -> None:
    coarse = dialect("gcode-words", axis__decimals=1)
    stages = {"driver": "dialect", "dialect": coarse, "address": ADDRESS}

    with pytest.raises(DescriptionError, match=r"axes.mask.tolerance_mm: 0.005 mm is finer"):
        parse(changed(rig_table(), devices__stages=stages), "rig.toml", "rig")


@pytest.mark.parametrize("limits_mm", [[20.0, 0.0], [0.0, float("nan")]])
def test_falling_limits_and_limits_that_are_no_number_are_refused(limits_mm: list[float]) -> None:
    with pytest.raises(DescriptionError, match=r"axes.mask.limits_mm"):
        parse(changed(rig_table(), axes__mask__limits_mm=limits_mm), "rig.toml", "rig")


@pytest.mark.parametrize("driver", ["dialect", "gcode-stage"])
def test_the_driver_dialect_and_no_other_has_a_file(driver: str) -> None:
    entry = {"driver": driver, "address": ADDRESS}
    if driver != "dialect":
        entry["dialect"] = "gcode-words.toml"
    read, _ = with_dialects(changed(rig_table(), devices__stages=entry), CONFIGS / "dialects")

    with pytest.raises(DescriptionError, match="needs a dialect file"):
        parse(read, "rig.toml", "rig")


def test_a_dialect_file_that_is_not_there_is_named() -> None:
    entry = {"driver": "dialect", "dialect": "nowhere.toml", "address": ADDRESS}

    with pytest.raises(DescriptionError, match=r"nowhere.toml: it cannot be read"):
        with_dialects(changed(rig_table(), devices__stages=entry), CONFIGS)


def test_the_copy_in_a_run_folder_is_read_back(tmp_path: Path) -> None:
    entry = {"driver": "dialect", "dialect": "../dialects/gcode-words.toml", "address": ADDRESS}
    rig = changed(rig_table(), devices__stages=entry)
    first, texts = with_dialects(rig, CONFIGS / "rigs")
    for name, text in texts.items():
        (tmp_path / "run" / name).parent.mkdir(parents=True)
        (tmp_path / "run" / name).write_bytes(text)

    again, kept = with_dialects(rig, tmp_path / "run")

    assert list(texts) == ["dialects/gcode-words.toml"]
    assert (again, kept) == (first, texts)


@contextmanager
def served(instrument: Instrument, clock: VirtualClock) -> Iterator[Scripted]:
    scripted = Scripted(instrument)
    with serve(clock, ADDRESS, scripted, "direct"):
        yield scripted


def entry(read: Dialect, **more: Any) -> DeviceEntry:
    return DeviceEntry(driver="dialect", dialect=read, address=ADDRESS, **more)


@contextmanager
def scpi_stage(**changes: Any) -> Iterator[tuple[VirtualClock, Scripted, DialectStage, ScpiStage]]:
    clock = VirtualClock(0)
    track = Track(3.0, 0.0, homed=True)
    controller = ScpiStage("a", {"X": track}, {"X": Travel((0.0, 20.0), 10.0)}, clock)
    axis = Axis(device="stages", letter="X", limits_mm=(0.0, 20.0), speed_mm_s=10.0)
    with served(controller, clock) as scripted:
        spoken = Spoken("stages", entry(dialect("scpi-stage", **changes)), clock)
        stage = DialectStage("mask", axis, spoken, SharedLink(spoken.link), clock)
        stage.open()
        yield clock, scripted, stage, controller
        stage.close()


def test_a_silent_setter_and_its_confirmation_are_one_write() -> None:
    with scpi_stage() as (_, scripted, stage, _):
        stage.start(4.0)

        assert scripted.sent[-1] == "MOVE:ABS X,4.0000\nSYST:ERR?"


def test_a_setter_that_is_not_confirmed_is_refused() -> None:
    with scpi_stage() as (_, _, stage, controller):
        controller.trip("limit")

        with pytest.raises(DeviceError, match='-221,"Settings conflict"') as refusal:
            stage.start(4.0)

        assert refusal.value.kind == "refused"
        assert stage.state().alarm


def test_a_device_that_calls_a_millimetre_something_else_is_sent_that() -> None:
    with scpi_stage(axis__device_per_mm=0.5, axis__decimals=3) as (_, scripted, stage, _):
        here_mm = stage.state().encoder_mm

        stage.start(9.0)

        assert here_mm == 6.0
        assert scripted.sent[-1].startswith("MOVE:ABS X,4.500")


def test_a_stop_is_sent_as_it_stands_in_the_file() -> None:
    with scpi_stage() as (clock, scripted, stage, _):
        stage.start(20.0)
        clock.sleep_until(clock.now_ns() + S)
        stage.stop_now()

        assert scripted.sent[-1] == "MOVE:STOP"
        assert stage.state().encoder_mm == pytest.approx(13.0)


@contextmanager
def counter(
    make: Callable[[VirtualClock], Instrument], read: Dialect, **more: Any
) -> Iterator[tuple[VirtualClock, Scripted, DialectCounter]]:
    clock = VirtualClock(0)
    with served(make(clock), clock) as scripted:
        device = DialectCounter("counter", entry(read, **more), clock)
        device.open()
        yield clock, scripted, device
        device.close()


def even(rate_hz: float) -> Any:
    return lambda open_ns, close_ns: round(rate_hz * (close_ns - open_ns) / S)


@pytest.mark.parametrize("bits", [26, 32])
def test_a_totaliser_that_rolls_over_between_two_looks_loses_nothing(bits: int) -> None:
    def nearly_full(clock: VirtualClock) -> Totaliser:
        totaliser = Totaliser("t", even(1e6), bits, clock)
        totaliser.total = 2**bits - 500_000
        return totaliser

    with counter(nearly_full, dialect("scpi-totaliser", counter__bits=bits)) as (_, _, device):
        device.arm(2.0)
        counted = device.read()

        assert (counted.values, counted.live_s, counted.overflow) == ((2_000_000,), 2.0, False)


def test_a_gate_that_could_roll_over_twice_is_refused() -> None:
    with counter(lambda clock: Totaliser("t", even(1.0), 26, clock), dialect("scpi-totaliser")) as (
        _,
        sent,
        device,
    ):
        before = len(sent.sent)

        with pytest.raises(DeviceError, match="nothing was sent"):
            device.arm(34.0)  # 2**26 counts at 2 MHz: 33.55 s

        assert len(sent.sent) == before


def test_a_totaliser_is_read_when_the_gate_closes_and_not_later() -> None:
    with counter(lambda clock: Totaliser("t", even(1000.0), 26, clock), dialect("scpi-totaliser")) as (
        clock,
        _,
        device,
    ):
        device.arm(2.0)
        clock.sleep_until(clock.now_ns() + 2 * S)
        still_open = device.busy()
        clock.sleep_until(clock.now_ns() + 5 * S)

        assert not still_open
        assert device.read().values == (2000,)


def test_a_totaliser_whose_moment_is_in_doubt_gives_no_count() -> None:
    with counter(lambda clock: Totaliser("t", even(1000.0), 26, clock), dialect("scpi-totaliser")) as (
        _,
        sent,
        device,
    ):
        device.arm(2.0)
        sent.change = lambda message, reply: b"" if len(sent.sent) % 5 == 4 else reply

        with pytest.raises(DeviceError, match="when it was read is known to"):
            for _ in range(5):
                device.read()
                device.arm(2.0)


def test_a_total_that_the_totaliser_cannot_show_is_garbage() -> None:
    with counter(lambda clock: Totaliser("t", even(1000.0), 26, clock), dialect("scpi-totaliser")) as (
        _,
        sent,
        device,
    ):
        device.arm(2.0)
        sent.change = lambda message, reply: b"TOT 99999999\n"

        with pytest.raises(DeviceError, match="cannot show 99999999") as garbage:
            device.read()

        assert garbage.value.kind == "garbage"


def test_a_rate_that_was_not_measured_is_no_count() -> None:
    with counter(lambda clock: FrequencyMeter("f", even(1000.0), clock), dialect("scpi-frequency")) as (
        _,
        sent,
        device,
    ):
        device.arm(2.0)
        sent.change = lambda message, reply: b"+9.91000000E+37\n" if "FETC" in message else reply

        with pytest.raises(DeviceError, match="is no count"):
            device.read()


def test_a_rate_times_its_aperture_is_the_count() -> None:
    with counter(lambda clock: FrequencyMeter("f", even(12345.0), clock), dialect("scpi-frequency")) as (
        _,
        _,
        device,
    ):
        device.arm(2.0)

        assert device.read().values == (24690,)


def test_a_counter_that_gives_another_number_of_channels_is_garbage() -> None:
    with counter(
        lambda clock: Totaliser("t", even(1.0), 26, clock), dialect("scpi-totaliser"), channels=2
    ) as (_, _, device):
        device.arm(2.0)

        with pytest.raises(DeviceError, match="gave 1 channels and not 2"):
            device.read()


def test_channels_come_in_the_order_of_their_numbers() -> None:
    two = dialect("scpi-totaliser", command__fetch__reply=r"TOT (?P<value_2>\d+),(?P<value_1>\d+)")
    with counter(lambda clock: Totaliser("t", even(1.0), 26, clock), two, channels=2) as (_, sent, device):
        totals = iter([b"TOT 5,100\n", b"TOT 8,300\n"])
        sent.change = lambda message, reply: next(totals) if "TOT" in message else reply
        device.arm(2.0)

        assert device.read().values == (200, 3)


@pytest.mark.parametrize(
    ("before", "after", "bits", "counts"),
    [(0, 5, 26, 5), (2**26 - 1, 0, 26, 1), (2**32 - 10, 20, 32, 30), (7, 7, 26, 0), (7, 6, 26, 2**26 - 1)],
)
def test_what_was_counted_between_two_looks(before: int, after: int, bits: int, counts: int) -> None:
    assert counted_between(before, after, bits) == counts


def test_a_totaliser_of_26_bits_at_2_mhz_rolls_over_after_33_seconds() -> None:
    assert longest_s(26, 2e6) == pytest.approx(33.55, abs=0.01)


@pytest.mark.parametrize(
    ("text", "value"),
    [
        ("+9.91000000E+37", "nan"),
        ("9.91E37", "nan"),
        ("9.9E37", "inf"),
        ("-9.9E37", "-inf"),
        ("1.5", "1.5"),
    ],
)
def test_marks_of_what_is_no_number_never_become_one(text: str, value: str) -> None:
    """SCPI-1999, vol. 1, sect. 7.2.1 (9.91E37 from a counter's manual, 9.9E37 from memory)."""
    assert str(number(text)) == value


def test_what_a_gauge_says_unasked_is_passed_over() -> None:
    clock = VirtualClock(0)
    gauge = Gauge("lantern", clock)
    with served(gauge, clock) as scripted:
        sensor = DialectSensor("gauge", entry(dialect("text-gauge")), gauge._clock)
        sensor.open()
        gauge.chat()
        values = [sensor.read()]
        scripted.change = lambda message, reply: b"# degas due\n" + reply + b"# and done\n"
        values += [sensor.read(), sensor.read()]

        assert [value["pressure"] for value in values] == [(2e-5, "Pa")] * 3
        assert sensor._spoken.link.resyncs == 0


def test_what_a_gauge_could_not_measure_is_nan() -> None:
    clock = VirtualClock(0)
    gauge = Gauge("lantern", clock)
    with served(gauge, clock) as scripted:
        sensor = DialectSensor("gauge", entry(dialect("text-gauge")), gauge._clock)
        sensor.open()
        scripted.change = lambda message, reply: b"p = - Pa off\n"

        assert str(sensor.read()["pressure"]) == "(nan, 'Pa')"


def test_a_refusal_is_told_in_the_devices_words() -> None:
    clock = VirtualClock(0)
    gauge = Gauge("lantern", clock)
    with served(gauge, clock) as scripted:
        sensor = DialectSensor("gauge", entry(dialect("text-gauge")), gauge._clock)
        sensor.open()
        scripted.change = lambda message, reply: b"what?\n"

        with pytest.raises(DeviceError, match=r"refused 'pressure': what\?") as refusal:
            sensor.read()

        assert refusal.value.kind == "refused"
