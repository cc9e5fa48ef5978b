"""Bench: the same night over both transports, a bench that goes on where it was, and its table."""

from __future__ import annotations

import json
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from typing import Any, Literal

import pytest

from daq.devices.registry import open_devices
from daq.errors import DescriptionError
from daq.ports import Devices
from daq.records import Reading, Visit
from daq.sequencer import perform
from simulators.bench import WaveletBench, open_bench
from tests.examples import lantern_rig

ORDER = (1, 3, 2, 5, 7, 6, 4, 0)


class Rows:
    """A sink that keeps readings in a list."""

    def __init__(self) -> None:
        self.readings: list[Reading] = []

    def append_events(self, chunk: bytes) -> None:
        raise NotImplementedError(f"{len(chunk)} bytes of events")

    def commit(self, reading: Reading) -> int:
        self.readings.append(reading)
        return len(self.readings) - 1

    def stands_done(self) -> Mapping[int, int]:
        return {}


@contextmanager
def opened(
    seed: int | None = 1,
    transport: Literal["tcp", "direct"] = "direct",
    state: bytes | None = None,
    **changes: Any,
) -> Iterator[tuple[WaveletBench, Devices]]:
    rig = lantern_rig(**changes)
    bench = open_bench(rig, seed=seed, transport=transport, state=state)
    with open_devices(rig, bench.clock) as devices:
        yield bench, devices
    bench.close()


def night(bench: WaveletBench, devices: Devices, stands: int = 3) -> list[Reading]:
    """Return the readings of a few stands in zig-zag."""
    for stage in devices.stages:
        if not stage.state().homed:
            stage.home()
    visits = [
        (Visit(number=8 * stand + place, opening=opening, position_mm=0.64 * stand, dwell_s=2.2), 1, 0)
        for stand in range(stands)
        for place, opening in enumerate(ORDER if stand % 2 == 0 else ORDER[::-1])
    ]
    rows = Rows()
    for _ in perform(visits, devices, rows, bench.clock):
        pass
    return rows.readings


def test_readings_are_the_same_in_process_and_over_sockets() -> None:
    with opened(transport="direct") as (bench, devices):
        direct = night(bench, devices)

    with opened(transport="tcp") as (bench, devices):
        tcp = night(bench, devices)

    assert len(direct) == 24
    assert tcp == direct


def test_the_seed_of_the_table_holds_unless_another_is_given() -> None:
    nights = []
    for seed in (None, 1, 2):
        with opened(seed=seed) as (bench, devices):
            nights.append(night(bench, devices, stands=1))

    assert nights[0] == nights[1] != nights[2]


def test_a_bench_goes_on_where_it_was_kept() -> None:
    with opened() as (bench, devices):
        night(bench, devices, stands=2)
        kept = bench.keep()
        gone_on = _one_gate(bench, devices, after_ns=60_000_000_000)

    with opened(state=kept) as (bench, devices):
        now_ns, states = bench.clock.now_ns(), {stage.name: stage.state() for stage in devices.stages}
        resumed = _one_gate(bench, devices, after_ns=60_000_000_000)

    before = json.loads(kept)
    assert now_ns - before["now_ns"] < 1_000_000_000  # links take a moment to open
    assert all(state.homed and not state.moving for state in states.values())
    assert {name: state.encoder_mm for name, state in states.items()} == {
        name: axis["place_mm"] for name, axis in before["axes"].items()
    }
    assert resumed == gone_on


def _one_gate(bench: WaveletBench, devices: Devices, after_ns: int) -> float:
    start_ns = (bench.clock.now_ns() // after_ns + 1) * after_ns
    bench.clock.sleep_until(start_ns)
    devices.counter.arm(2.2)
    return devices.counter.read().values[0]


def test_a_new_bench_has_lost_its_references_and_starts_at_its_origin() -> None:
    bench = open_bench(lantern_rig(), seed=1, transport="direct", state=None)

    # 2026-12-01T17:00:00Z is 20 788 days and 17 h after 1970-01-01
    assert (bench.clock.now_ns(), bench.clock.utc_ns()) == (0, (20_788 * 86_400 + 17 * 3600) * 1_000_000_000)
    assert not any(axis["homed"] for axis in json.loads(bench.keep())["axes"].values())


def test_true_rates_come_position_by_opening() -> None:
    bench = open_bench(lantern_rig(), seed=1, transport="direct", state=None)

    rates_hz = bench.true_rates_hz([0, 7], [0.0, 1.0, 2.0])

    assert [len(row) for row in rates_hz] == [2, 2, 2]
    assert all(row[0] == 800.0 for row in rates_hz)


def test_a_closed_bench_answers_nobody() -> None:
    bench = open_bench(lantern_rig(), seed=1, transport="tcp", state=None)

    bench.close()

    with pytest.raises(OSError, match="nobody serves"):
        bench.clock.connect("tcp://127.0.0.1:7801", 1.0)


def test_every_problem_of_the_table_is_named_with_its_key() -> None:
    wrong = lantern_rig(
        bench__dark_rat_hz=1.0, bench__dead_time_s=-1.0, bench__source__linear_per_hour="much", bench__seed=-1
    )

    with pytest.raises(DescriptionError) as problem:
        open_bench(wrong, seed=None, transport="direct", state=None)

    text = str(problem.value)
    assert "rig lantern-bench, [bench], dark_rat_hz: unknown key. Did you mean 'dark_rate_hz'?" in text
    for key in ("dead_time_s", "source.linear_per_hour", "seed"):
        assert f"[bench], {key}: " in text


def test_a_rig_without_a_bench_cannot_be_simulated() -> None:
    with pytest.raises(DescriptionError, match=r"no table \[bench\]"):
        open_bench(lantern_rig(bench=None), seed=None, transport="direct", state=None)


def test_a_device_that_no_instrument_stands_for_is_named() -> None:
    with pytest.raises(DescriptionError, match=r"devices\.room\.driver: no simulated instrument .* 'modbus'"):
        open_bench(lantern_rig(devices__room__driver="modbus"), seed=None, transport="direct", state=None)


def test_a_channel_of_which_the_bench_says_nothing_is_named() -> None:
    with pytest.raises(
        DescriptionError, match=r"devices\.counter\.channels: \[bench\.channels\] says what 1 of"
    ):
        open_bench(lantern_rig(devices__counter__channels=2), seed=1, transport="direct", state=None)


@pytest.mark.parametrize("sees", [[{"sees": "coincidence"}], [{}, {"sees": "coincidence"}, {}]])
def test_coincidences_need_their_singles(sees: list[dict[str, str]]) -> None:
    with pytest.raises(DescriptionError, match="channel 0 alone sees coincidences"):
        open_bench(lantern_rig(bench__channels=sees), seed=1, transport="direct", state=None)
