"""Why a run holds, what clears it, and what it does when nobody comes."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest

from daq.errors import DeviceError
from daq.estimate import Judge, Rules
from daq.estimate.quality import rules_of
from daq.ports import Counted
from daq.records import Quality, Reading
from daq.service.course import carry_out
from daq.service.groups import Place
from daq.service.night import COMPLETE, Night
from daq.service.requests import Request
from daq.storage.log import read_log
from tests.daq.service.test_night import a_night, asking, events
from tests.standins import MemoryBench


def told(folder, event: str) -> list[dict]:
    return [entry for entry in read_log(folder) if entry["event"] == event]


def at_visit(night: Night, number: int, act: Callable[[], None]) -> None:
    """Do something once a visit is stored."""

    def on_visit(reading: Reading) -> None:
        if reading.visit == number and reading.attempt == 1:
            act()

    night.on_visit = on_visit


def read_as(bench: MemoryBench, value: float) -> Callable[[], None]:
    """Return what makes the thermometer show a value from now on."""
    return lambda: setattr(bench.sensor, "read", lambda: {"temperature": (value, "K")})


def with_limit(night: Night, bench: MemoryBench, **limit: object) -> None:
    bench.sensor.every_s = 0.0
    read_as(bench, 295.0)()
    night.judge.rules = rules_of({"limits": {"room_temperature": {"below": 300.0, **limit}}})


def test_a_sensor_out_of_its_band_holds_until_it_has_been_good_for_long_enough(tmp_path):
    night, bench = a_night(tmp_path)
    with_limit(night, bench, settle_s=120.0)
    at_visit(night, 10, read_as(bench, 310.0))
    good_again = round(1000e9)
    bench.clock.call_at(good_again, read_as(bench, 295.0))

    ended = carry_out(night, Place(0))

    reading = next(one for one in bench.sink.kept if one.visit == 8 and one.attempt == 2)
    assert ended == COMPLETE
    assert reading.gate_open_ns >= good_again + 120e9
    assert [entry["cause"] for entry in told(tmp_path, "holding")] == ["sensor"]
    assert "and has to be at most 300" in told(tmp_path, "holding")[0]["text"]


def test_an_interlock_stops_the_stages_and_is_cleared_at_the_bench_only(tmp_path):
    night, bench = a_night(tmp_path)
    with_limit(night, bench, interlock=True)
    at_visit(night, 10, read_as(bench, 310.0))
    bench.clock.call_at(round(200e9), read_as(bench, 295.0))
    settled = asking_when_held(night, "resume", "resume-at-bench", after_s=250.0)

    ended = carry_out(night, Place(0))

    outcomes = dict(settled)
    assert ended == COMPLETE
    assert "at the bench" in outcomes["resume"]
    assert outcomes["resume-at-bench"].startswith("heard")
    assert "mask stop" in [word for _, word in bench.trace]


def asking_when_held(night: Night, *wanted: str, after_s: float = 0.0) -> list[tuple[str, str]]:
    """Let operators ask one thing each time the run listens while it holds."""
    waiting, settled = list(wanted), list[tuple[str, str]]()

    def requests() -> list[Request]:
        somebody = waiting and night.holds and night.clock.now_ns() >= after_s * 1e9
        return [Request(1, waiting.pop(0), "Kim", "now")] if somebody else []

    night.asked.requests = requests
    night.asked.settled = lambda request, outcome: settled.append((request.what, outcome))
    return settled


def test_a_hold_that_nobody_clears_parks_after_two_hours(tmp_path):
    night, bench = a_night(tmp_path)
    with_limit(night, bench, interlock=True)
    at_visit(night, 10, read_as(bench, 310.0))

    with pytest.raises(DeviceError, match="Nobody cleared it for 2 h"):
        carry_out(night, Place(0))

    assert 7200 < bench.clock.now_ns() / 1e9 < 7200 + 120
    (warning,) = [one for one in night.live.watcher.standing if one.says.kind == "hold"]
    assert warning.says.wakes


@pytest.mark.parametrize(
    ("state", "words"), [({"alarm": "limit"}, "alarm: limit"), ({"homed": False}, "reference")]
)
def test_an_axis_with_an_alarm_or_without_its_reference_waits_for_a_person(tmp_path, state, words):
    night, bench = a_night(tmp_path)
    stage = bench.mask_stage
    healthy = stage.state
    at_visit(night, 10, lambda: setattr(stage, "state", lambda: replace(healthy(), **state)))
    asking_when_held(night, "resume-at-bench")
    show = night.devices.mask.show

    def mended_by_then(opening: int) -> float:
        if night.holds:
            stage.state = healthy  # type: ignore[method-assign]
        return float(show(opening))

    night.devices.mask.show = mended_by_then  # type: ignore[method-assign]

    ended = carry_out(night, Place(0))

    assert ended == COMPLETE
    assert words in told(tmp_path, "holding")[0]["text"]


def test_a_person_at_the_bench_may_have_lost_references_found_again(tmp_path):
    night, bench = a_night(tmp_path)
    at_visit(night, 10, lambda: setattr(bench.mask_stage, "homed", False))
    night.asked.requests = lambda: (
        [Request(1, "resume-at-bench", "Kim", "now", "home")] if night.holds else []
    )

    ended = carry_out(night, Place(0))

    assert ended == COMPLETE
    assert bench.mask_stage.homed


def test_an_overloaded_detector_is_shut_off_and_puts_kappa_in_doubt(tmp_path):
    night, bench = a_night(tmp_path)
    night.judge.rules = rules_of({"overload_hz": 1e6})
    count = bench.counter.read
    bright = iter([False] * 12 + [True] + [False] * 10**4)
    bench.counter.read = lambda: (  # type: ignore[method-assign]
        replace(count(), values=(1e8,)) if next(bright) else count()
    )
    doubts = list[bool]()
    settled = asking_when_held(night, "acknowledge", "resume-at-bench")
    night.alive = lambda: doubts.append(any(one.says.in_doubt for one in night.live.watcher.standing))

    ended = carry_out(night, Place(0))

    assert ended == COMPLETE
    assert any(doubts)
    assert [what for what, _ in settled] == ["acknowledge", "resume-at-bench"]
    assert "1e+06 are allowed" in told(tmp_path, "holding")[0]["text"]


def test_without_light_the_run_holds_tries_the_next_stand_and_goes_on_when_it_is_back(tmp_path):
    night, bench = a_night(tmp_path)
    count = bench.counter.read
    back_ns = round(600e9)
    bench.counter.read = lambda: (  # type: ignore[method-assign]
        replace(count(), values=(0.0,)) if 20e9 < bench.clock.now_ns() < back_ns else count()
    )

    ended = carry_out(night, Place(0))

    faults = told(tmp_path, "fault")
    assert ended == COMPLETE
    assert {entry["kind"] for entry in faults} == {"no counts"}
    assert len(faults) < 6
    assert not any(one.says.kind in ("hold", "no-counts") for one in night.live.watcher.standing)


def test_an_axis_that_is_astray_in_six_stands_waits_for_a_person(tmp_path):
    night, _ = a_night(tmp_path)
    judge = night.judge.judge
    night.judge.judge = lambda reading: judge(  # type: ignore[method-assign]
        replace(reading, quality=reading.quality | Quality.OFF_TARGET)
    )

    with pytest.raises(DeviceError, match="away from its target in 6 stands"):
        carry_out(night, Place(0))


def test_a_stand_that_a_rule_refuses_is_measured_again_once(tmp_path):
    night, bench = a_night(tmp_path)
    bench.counter.overflow = True
    at_visit(night, 2, lambda: setattr(bench.counter, "overflow", False))

    ended = carry_out(night, Place(0))

    tries = [(reading.visit, reading.attempt) for reading in bench.sink.kept]
    assert ended == COMPLETE
    assert tries[:16] == [*((visit, 1) for visit in range(8)), *((visit, 2) for visit in range(8))]
    assert all(attempt == 1 for visit, attempt in tries if visit >= 8)
    assert {reading.reason for reading in bench.sink.kept if reading.attempt == 2} == {3}


def test_a_disk_with_next_to_no_room_ends_the_run_cleanly(tmp_path):
    night, bench = a_night(tmp_path)
    night.shortage = lambda: "Only 0.15 GB are free." if len(bench.sink.kept) >= 16 else ""
    night.exhausted = lambda: "Only 0.15 GB are free; the run ends."

    ended = carry_out(night, Place(0))

    assert ended == "ended at request after a stand"
    assert "no room left" in events(tmp_path)


def test_a_warning_is_acknowledged_and_calls_are_muted_by_name(tmp_path):
    night, _ = a_night(tmp_path)
    asked = iter(
        [
            [],
            [Request(1, "hold", "Kim", "now")],
            [Request(2, "acknowledge", "Kim", "now", "hold-1")],
            [Request(3, "mute", "Kim", "now", "90")],
            [Request(4, "resume", "Kim", "now")],
        ]
    )
    seen = list[str]()
    night.asked.requests = lambda: next(asked, [])
    night.asked.idle = lambda: seen.extend(one.acknowledged_by for one in night.live.watcher.standing)

    carry_out(night, Place(0))

    assert "Kim" in seen
    assert night.live.muted
    assert [entry.get("about") for entry in told(tmp_path, "acknowledge asked")] == ["hold-1"]


def test_a_program_that_was_restarted_three_times_within_the_hour_ends_after_the_lap(tmp_path):
    night, bench = a_night(tmp_path)
    night.live.watcher._restarts = 3

    ended = carry_out(night, Place(8))

    assert ended == "ended at request after a stand"
    assert bench.sink.kept[-1].visit == 23


def test_a_hold_that_was_asked_for_says_how_to_go_on(tmp_path):
    night, _ = a_night(tmp_path)
    asking(night, "hold", "resume")

    carry_out(night, Place(0))

    (warning,) = told(tmp_path, "warning")
    assert warning["text"] == "night watch asked the run to hold."
    assert not warning["wakes"]


def test_openings_that_look_like_others_hold_the_run_before_anybody_leaves(tmp_path):
    night, bench = a_night(tmp_path)
    rates = night.itinerary.rates_hz
    swapped = {3: 7, 7: 3}  # AB and ABC
    night.judge = Judge(night.running._plan, Rules(), rates)
    count, shown = bench.counter.read, night.itinerary

    def other() -> Counted:
        visit = len(bench.sink.kept) % len(shown)
        opening = int(shown.opening[visit])
        column = int(np.flatnonzero(shown.openings == swapped.get(opening, opening))[0])
        counted = count()
        value = round(float(rates[shown.position_index[visit], column]) * counted.live_s)
        return Counted((value,), counted.live_s)

    bench.counter.read = other  # type: ignore[method-assign]
    settled = asking_when_held(night, "acknowledge", "resume-at-bench")

    carry_out(night, Place(0))

    (entry,) = told(tmp_path, "holding")
    assert entry["cause"] == "labels" and "AB looks like ABC, ABC looks like AB" in entry["text"]
    assert [what for what, _ in settled] == ["acknowledge", "resume-at-bench"]
