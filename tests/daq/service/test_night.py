import json
import math
from collections import Counter
from dataclasses import replace
from itertools import pairwise

import pytest

from daq.errors import DaqError, DeviceError, StorageError
from daq.estimate import Blinding, Judge, Rules, Running
from daq.itinerary import compose, plan_of
from daq.sequencer import State
from daq.service.asked import Asked
from daq.service.course import carry_out
from daq.service.groups import Place
from daq.service.live import Live
from daq.service.night import AT_REQUEST, COMPLETE, Night
from daq.service.parking import park
from daq.service.requests import Request
from daq.storage.feed import read_feed
from daq.storage.log import RunLog, read_log
from simulators.clock import VirtualClock
from tests.examples import lantern, lantern_rig
from tests.standins import MemoryBench, fails_once, no_fault

META = {
    **dict.fromkeys(("run", "title", "kind"), "lantern"),
    "clock": "virtual",
    "slits": 3,
    "normalisation": "pairwise",
    "blinding": "open",
}


def a_night(folder, fault=no_fault, laps=4, **changes):
    # about as many counts as the stand-in gives, so that nothing has to be warned of
    expect = {"expect__single_slit_rate_hz": 250.0, "expect__background_rate_hz": 0.0}
    measurement = lantern(itinerary__laps=laps, positions__number=3, **expect, **changes)
    itinerary = compose(measurement, lantern_rig())
    bench = MemoryBench(VirtualClock(origin_utc_ns=0), fault)
    night = Night(
        folder=folder,
        itinerary=itinerary,
        archive=bench.sink,  # type: ignore[arg-type]
        clock=bench.clock,
        devices=bench.devices,
        running=Running(plan_of(itinerary, measurement)),
        judge=Judge(plan_of(itinerary, measurement), Rules()),
        live=Live(folder, META, itinerary, bench.clock),
        log=RunLog(folder),
        asked=Asked(),
    )
    return night, bench


def events(folder):
    return [entry["event"] for entry in read_log(folder)]


def test_a_night_without_faults_performs_every_visit_once(tmp_path):
    night, bench = a_night(tmp_path)

    ended = carry_out(night, Place(0))

    assert ended == COMPLETE
    assert [reading.visit for reading in bench.sink.kept] == list(range(96))
    assert night.running.estimate().pairs == 2
    assert events(tmp_path) == ["run begins"]


@pytest.mark.parametrize("kind", ["timeout", "lost", "garbage"])
def test_after_a_fault_the_stand_is_repeated_whole_and_the_run_goes_on(tmp_path, kind):
    night, bench = a_night(tmp_path, fails_once("counter read", kind))

    ended = carry_out(night, Place(0))

    tries = Counter((reading.visit, reading.attempt) for reading in bench.sink.kept)
    assert ended == COMPLETE
    assert set(tries.values()) == {1}
    assert [visit for visit, attempt in tries if attempt == 2] == list(range(8))
    assert [visit for visit, attempt in tries if attempt == 1] == [0, *range(8, 96)]
    assert night.running.estimate().pairs == 2
    assert "fault" in events(tmp_path)


def test_a_lost_link_is_closed_and_opened_again(tmp_path):
    night, bench = a_night(tmp_path, fails_once("counter read", "lost"))

    carry_out(night, Place(0))

    assert [word for _, word in bench.trace if word.endswith("close")] == [
        "mask close",
        "detector close",
        "counter close",
    ]


@pytest.mark.parametrize("state", ["open", "blinded"])
@pytest.mark.parametrize("kind", ["garbage", "timeout"])
def test_what_a_device_replied_is_told_unless_the_run_is_blinded(tmp_path, caplog, state, kind):
    def fault(doing: str) -> None:
        if doing in ("counter read", "counter open") and bench.sink.kept:
            raise DeviceError(
                "b'#13412908' in reply to 'TOT?'",
                where="counter",
                remedy="Look, then `run --resume`",
                kind=kind,
            )

    night, bench = a_night(tmp_path, fault)
    night.blinding = Blinding(state)

    with caplog.at_level("WARNING"), pytest.raises(DeviceError) as raised:
        carry_out(night, Place(0))

    told = json.dumps(read_log(tmp_path)) + json.dumps(read_feed(tmp_path)) + str(raised.value)
    assert ("412908" in told) == (state == "open")
    assert '"counter: ' in told
    assert "412908" not in caplog.text and "resume" not in caplog.text


def test_a_fault_in_blocked_order_costs_no_pair(tmp_path):
    night, bench = a_night(tmp_path, fails_once("counter read", "timeout"), itinerary__order="blocked")

    carry_out(night, Place(0))

    assert {reading.attempt for reading in bench.sink.kept} == {1}
    assert night.running.estimate().pairs == 2


def test_a_device_that_stays_away_parks_the_run_after_four_hours(tmp_path):
    night, bench = a_night(tmp_path, fails_once("counter read", "lost", times=10**6))

    with pytest.raises(DeviceError, match="no reply"):
        carry_out(night, Place(0))

    assert night.state is State.PARKING
    assert 4 * 3600 < bench.clock.now_ns() / 1e9 < 4 * 3600 + 400
    assert [reading.visit for reading in bench.sink.kept] == [0]


def test_a_refusal_is_tried_again_once_and_parks_when_it_stays(tmp_path):
    night, bench = a_night(tmp_path, fails_once("mask start", "refused", times=10**6))

    with pytest.raises(DeviceError):
        carry_out(night, Place(0))

    assert night.state is State.PARKING
    assert 20e9 < bench.clock.now_ns() < 60e9


def test_who_asks_for_the_end_gets_it_after_the_stand(tmp_path):
    night, bench = a_night(tmp_path)
    night.on_visit = lambda reading: setattr(night.asked, "end", reading.visit >= 10)

    ended = carry_out(night, Place(0))

    assert ended == AT_REQUEST
    assert bench.sink.kept[-1].visit == 15


def asking(night, *wanted):
    """Let operators ask one thing each time the run listens, from the second time on."""
    waiting = iter(
        [[], *([Request(number, what, "night watch", "now")] for number, what in enumerate(wanted))]
    )
    night.asked.requests = lambda: next(waiting, [])
    settled: list[tuple[str, str]] = []
    night.asked.settled = lambda request, outcome: settled.append((request.what, outcome))
    return settled


def test_a_hold_waits_between_stands_and_loses_nothing(tmp_path):
    night, bench = a_night(tmp_path)
    settled = asking(night, "hold", "resume")

    ended = carry_out(night, Place(0))

    assert ended == COMPLETE
    assert [what for what, _ in settled] == ["hold", "resume"]
    assert [reading.visit for reading in bench.sink.kept] == list(range(96))
    assert all(reading.attempt == 1 for reading in bench.sink.kept)
    assert [event for event in events(tmp_path) if "asked" in event or event == "holding"] == [
        "hold asked",
        "holding",
        "resume asked",
    ]


def test_an_end_asked_for_while_holding_ends_the_run(tmp_path):
    night, bench = a_night(tmp_path)
    asking(night, "hold", "end")

    ended = carry_out(night, Place(0))

    assert ended == AT_REQUEST
    assert len(bench.sink.kept) == 8


def test_an_end_after_the_lap_comes_at_the_edge_of_a_lap(tmp_path):
    night, bench = a_night(tmp_path)
    asking(night, "end-after-lap")

    carry_out(night, Place(0))

    assert len(bench.sink.kept) == 24


def test_a_run_holds_while_there_is_no_room_and_goes_on_when_there_is(tmp_path):
    night, bench = a_night(tmp_path)
    said = iter(["", "", "no room", "no room", "no room"])
    night.shortage = lambda: next(said, "")

    ended = carry_out(night, Place(0))

    assert ended == COMPLETE
    assert [reading.visit for reading in bench.sink.kept] == list(range(96))
    assert "holding" in events(tmp_path)


def test_a_visit_that_a_full_disk_refused_is_measured_again_with_its_stand(tmp_path):
    night, bench = a_night(tmp_path)
    store, full = bench.sink.commit, iter([False] * 10 + [True])

    def commit(reading):
        if next(full, False):
            raise StorageError("the disk is full", where="run.zarr", remedy="Make room")
        return store(reading)

    bench.sink.commit = commit
    said = iter([""] * 2 + ["no room"])
    night.shortage = lambda: next(said, "")

    ended = carry_out(night, Place(0))

    tries = [(reading.visit, reading.attempt) for reading in bench.sink.kept]
    assert ended == COMPLETE
    assert tries[:12] == [*((visit, 1) for visit in range(10)), (8, 2), (9, 2)]
    assert night.running.estimate().pairs == 2


def test_a_storage_error_with_room_on_the_disk_ends_the_run(tmp_path):
    night, bench = a_night(tmp_path)

    def commit(reading):
        raise StorageError("the disk has gone", where="run.zarr", remedy="Look at it")

    bench.sink.commit = commit

    with pytest.raises(StorageError):
        carry_out(night, Place(0))


def test_parking_shows_no_slit(tmp_path):
    night, bench = a_night(tmp_path)

    park(night)

    assert bench.mask_stage.target_mm == 0.0


class Blocked:
    """A shutter that keeps how it was asked to stand."""

    name, armed, stands = "shutter", True, "open"

    def block(self) -> None:
        self.stands = "blocked"


def test_parking_shuts_the_beam_out_though_the_mask_does_not_answer(tmp_path):
    def fault(doing: str) -> None:
        if doing == "mask start":
            raise DeviceError("no reply", where="mask", kind="lost")

    night, _ = a_night(tmp_path, fault)
    shutter = Blocked()
    night.devices = replace(night.devices, shutter=shutter)

    park(night)

    assert shutter.stands == "blocked"
    assert events(tmp_path) == ["could not park"]


def test_an_ended_run_takes_no_further_step(tmp_path):
    night, _ = a_night(tmp_path)
    night.become(State.ENDED)

    with pytest.raises(DaqError, match="cannot become moving"):
        night.become(State.MOVING)


def test_the_feed_tells_the_run_as_it_stands(tmp_path):
    night, _ = a_night(tmp_path)

    carry_out(night, Place(0))
    night.live.write("ended", night.running, COMPLETE, now=True)

    feed = read_feed(tmp_path)
    assert feed is not None
    assert feed["visit"] == {
        "number": 95,
        "of": 96,
        "opening": feed["visit"]["opening"],
        "position_mm": feed["visit"]["position_mm"],
        "attempt": 1,
    }
    assert feed["kappa"]["pairs"] == 2
    assert len(feed["rates_hz"]) == 8
    assert len(feed["rates_hz"][0]) == len(feed["epsilon_hz"]) == 3
    assert feed["history"]["kappa"][-1] == feed["kappa"]["value"]
    assert feed["ended"]["reason"] == COMPLETE
    assert feed["log"][0]["text"] == "Run begins at visit 0."
    assert len(json.dumps(feed)) < 20_000


def test_the_estimate_is_asked_after_every_lap_of_a_night_and_more_rarely_in_a_long_run(tmp_path):
    night, bench = a_night(tmp_path, laps=200)
    asked_after: list[float] = []
    night.live.watcher.know = lambda figures: asked_after.append(len(bench.sink.kept) / 24)

    carry_out(night, Place(0))

    assert asked_after[:64] == list(range(1, 65))
    assert all(late <= early * (1 + 1 / 64) + 1 for early, late in pairwise(asked_after))
    assert len(asked_after) <= 64 * (1 + math.log(200 / 64)) + 1  # each time the run is longer by a 64th
    assert asked_after[-1] == 200


def test_a_request_cuts_a_pause_short_and_the_run_ends_after_the_stand_that_follows(tmp_path):
    night, bench = a_night(tmp_path)
    pause_ns = round(600e9)
    night.itinerary = replace(night.itinerary, pauses={48: 600.0})
    night.asked.requests = lambda: (
        [Request(1, "end", "Kim", "2026-12-01T00:00:00Z")] if len(bench.sink.kept) == 48 else []
    )

    ended = carry_out(night, Place(0))

    before, after = (reading for reading in bench.sink.kept if reading.visit in (47, 48))
    assert ended == AT_REQUEST
    assert [entry["text"] for entry in read_log(tmp_path) if entry["event"] == "pause"] == [
        "A pause of 600 s before the next pair, as planned."
    ]
    assert after.gate_open_ns - before.gate_close_ns < pause_ns / 100
    assert bench.sink.kept[-1].visit == 55
