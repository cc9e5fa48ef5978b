"""After a long wait two windows and the dark are looked at first; what is not in order holds the run."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

from daq.errors import DeviceError
from daq.ports import Counted
from daq.records import CLOSED_VISIT, FLANK_VISIT, UNPLANNED, Quality
from daq.service.course import carry_out
from daq.service.groups import Place
from daq.service.night import COMPLETE, Night
from tests.daq.service.test_holding import asking_when_held, at_visit, read_as, told, with_limit
from tests.daq.service.test_night import a_night
from tests.daq.tasks.test_ready import window
from tests.standins import MemoryBench

# The stand-in counts its gates, so every flank of a window gets about as many counts: they balance.
WINDOWS = {name: window(at) | {"height": 1.0, "background": 0.0} for name, at in (("A", 1.0), ("C", 4.0))}
BALANCED = {"up": WINDOWS, "position_mm": 0.0, "margin_mm": {"A": 0.4, "C": 0.4}}


def waiting(folder: Path, minutes: float, **values: object) -> tuple[Night, MemoryBench]:
    """Return a night that holds for a sensor after visit 10, for about so many minutes."""
    night, bench = a_night(folder)
    with_limit(night, bench)
    at_visit(night, 10, read_as(bench, 310.0))
    bench.clock.call_at(round((30 + 60 * minutes) * 1e9), read_as(bench, 295.0))
    night.records = {"register": {"values": BALANCED | values}}
    return night, bench


def test_after_a_long_wait_flanks_and_dark_come_first_and_the_stand_again(
    tmp_path: Path,
) -> None:
    night, bench = waiting(tmp_path, 12)

    ended = carry_out(night, Place(0))

    kept = bench.sink.kept
    first = next(at for at, one in enumerate(kept) if one.visit == UNPLANNED)
    ready = kept[first : first + 5]
    assert ended == COMPLETE
    assert [one.reason for one in ready] == [FLANK_VISIT] * 4 + [CLOSED_VISIT]
    assert all(one.quality & Quality.FLANK for one in ready[:4])
    assert [one.visit for one in kept[first + 5 : first + 13]] == list(range(8, 16))
    assert sum(one.visit == UNPLANNED for one in kept) == 5
    assert "After 13 min without a count: A stands" in told(tmp_path, "ready")[0]["text"]
    assert night.running.estimate().pairs == 2


def test_after_a_short_wait_nothing_is_looked_at(tmp_path: Path) -> None:
    night, bench = waiting(tmp_path, 5)

    assert carry_out(night, Place(0)) == COMPLETE
    assert not [one for one in bench.sink.kept if one.visit == UNPLANNED]


def test_a_window_off_its_place_waits_for_the_bench_and_is_looked_at_again(tmp_path: Path) -> None:
    night, bench = waiting(tmp_path, 12)
    count = bench.counter.read
    mended_ns = round(1500e9)

    def read() -> Counted:
        off = bench.clock.now_ns() < mended_ns and _last_move(bench) in ("mask to 1.6", "mask to 4.6")
        return replace(count(), values=(0.0,)) if off else count()

    bench.counter.read = read  # type: ignore[method-assign]
    settled = asking_when_held(night, "resume", "resume-at-bench", after_s=1600.0)

    ended = carry_out(night, Place(0))

    assert ended == COMPLETE
    assert [entry["cause"] for entry in told(tmp_path, "holding")] == ["sensor", "flank"]
    assert "The mask is off its place: A stands" in told(tmp_path, "holding")[1]["text"]
    assert "at the bench" in dict(settled)["resume"]
    assert len(told(tmp_path, "ready")) == 2


def _last_move(bench: MemoryBench) -> str:
    return next(word for _, word in reversed(bench.trace) if word.startswith("mask to"))


def test_a_mask_that_nobody_puts_right_parks_the_run(tmp_path: Path) -> None:
    night, _ = waiting(tmp_path, 12, up=WINDOWS | {"C": window(4.0) | {"height": 1e9}})

    with pytest.raises(DeviceError, match="C is dark on both flanks"):
        carry_out(night, Place(0))


def test_a_night_without_records_waits_and_goes_on(tmp_path: Path) -> None:
    night, bench = waiting(tmp_path, 12)
    night.records = {}

    assert carry_out(night, Place(0)) == COMPLETE
    assert [one.reason for one in bench.sink.kept if one.visit == UNPLANNED] == [CLOSED_VISIT]


def half_covered(folder: Path, *, cured: bool) -> tuple[Night, MemoryBench]:
    """Return a night in which AC counts half from its 14th lap on, until the mask has found its reference."""
    night, bench = a_night(folder, laps=40)
    night.records = {"register": {"values": BALANCED}}
    night.live.watcher.remedy_left = True
    count, home, homed = bench.counter.read, bench.mask_stage.home, list[int]()
    arm, shown = bench.counter.arm, [""]

    def read() -> Counted:
        counted: Counted = count()
        covered = shown[-1] == "mask to 5" and len(bench.sink.kept) > 13 * 24
        half = covered and not (homed and cured)
        return replace(counted, values=(1000.0 / 2 if half else 1000.0,))

    def find() -> None:
        homed.append(bench.clock.now_ns())
        home()

    def armed(dwell_s: float) -> None:
        shown.append(_last_move(bench))
        arm(dwell_s)

    bench.counter.read, bench.mask_stage.home, bench.counter.arm = read, find, armed  # type: ignore[method-assign]
    return night, bench


def test_an_opening_that_does_not_fit_lets_the_mask_find_its_reference_once_and_the_run_goes_on(tmp_path):
    night, bench = half_covered(tmp_path, cured=True)

    ended = carry_out(night, Place(0))

    assert ended == COMPLETE
    (found,) = told(tmp_path, "reference")
    assert found["text"].startswith("Opening AC does not fit what it counted before")
    assert "Before the run goes on: A stands" in told(tmp_path, "ready")[0]["text"]
    assert told(tmp_path, "holding") == []
    assert sum(one.visit == UNPLANNED for one in bench.sink.kept) == 5
    assert [entry for entry in told(tmp_path, "warning") if entry["wakes"]] == []


def test_a_window_that_is_off_its_place_all_the_same_holds_for_the_bench_with_one_call(tmp_path):
    night, bench = half_covered(tmp_path, cured=False)
    count = bench.counter.read

    def read() -> Counted:
        return (
            replace(count(), values=(0.0,))
            if _last_move(bench) in ("mask to 1.6", "mask to 4.6")
            else count()
        )

    bench.counter.read = read  # type: ignore[method-assign]

    with pytest.raises(DeviceError, match="off its place"):
        carry_out(night, Place(0))

    assert [entry["cause"] for entry in told(tmp_path, "holding")] == ["flank"]
    assert len(told(tmp_path, "reference")) == 1


def test_a_mask_that_cannot_find_its_reference_holds_for_the_bench(tmp_path):
    night, bench = half_covered(tmp_path, cured=False)

    def lost() -> None:
        raise DeviceError("no reference switch", where="axis mask", kind="reference")

    bench.mask_stage.home = lost  # type: ignore[method-assign]

    with pytest.raises(DeviceError, match="did not find its reference: axis mask: no reference switch"):
        carry_out(night, Place(0))


def test_an_opening_that_still_does_not_fit_is_left_out_and_calls_somebody(tmp_path):
    night, _ = half_covered(tmp_path, cured=False)

    assert carry_out(night, Place(0)) == COMPLETE
    assert len(told(tmp_path, "reference")) == 1
    assert [one["id"] for one in told(tmp_path, "warning") if one["id"].startswith("openings")]
