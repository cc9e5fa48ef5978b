"""The small files of a lab: feed, log, folder names, digests, copies."""

from __future__ import annotations

import hashlib
import struct
from dataclasses import replace
from pathlib import Path

import pytest
import xarray as xr

from daq.errors import StorageError
from daq.records import Reading
from daq.storage.digest import digest, gate_digest
from daq.storage.disk import Disk
from daq.storage.feed import FEED, read_feed, write_feed
from daq.storage.lab import new_run_folder, run_folder_name, runs
from daq.storage.log import LOG, RunLog, read_log
from daq.storage.reader import open_visits
from daq.storage.texts import changed_texts, write_texts
from tests.daq.storage.example import reading, started

UTC_NS = 1_796_107_020_999_999_999  # 2026-12-01T06:37:00.999999999Z


def visits_of(folder: Path, readings: list[Reading]) -> xr.Dataset:
    with started(folder) as archive:
        for one in readings:
            archive.commit(one)
        return open_visits(folder)


def test_a_run_folder_is_called_after_its_second_and_its_name() -> None:
    assert run_folder_name(UTC_NS, "lantern") == "20261201T063700Z-lantern"


def test_a_second_run_of_the_same_second_gets_a_folder_of_its_own(tmp_path: Path) -> None:
    first = new_run_folder(tmp_path, UTC_NS, "lantern")
    first.mkdir(parents=True)

    second = new_run_folder(tmp_path, UTC_NS, "lantern")

    assert (first.name, second.name) == ("20261201T063700Z-lantern", "20261201T063700Z-lantern-2")


def test_runs_are_listed_newest_last_and_other_folders_are_not(tmp_path: Path) -> None:
    for second in (3, 1, 2):
        new_run_folder(tmp_path, UTC_NS + second * 10**9, "lantern").mkdir(parents=True)
    (tmp_path / "runs" / "notes").mkdir()

    names = [folder.name for folder in runs(tmp_path)]

    assert names == [f"20261201T06370{second}Z-lantern" for second in (1, 2, 3)]
    assert runs(tmp_path / "none") == []


def test_the_feed_is_replaced_whole_and_nan_becomes_null(tmp_path: Path) -> None:
    write_feed(tmp_path, {"format": 1, "kappa": {"value": float("nan")}})

    assert read_feed(tmp_path) == {"format": 1, "kappa": {"value": None}}
    assert [path.name for path in tmp_path.iterdir()] == [FEED]


def test_a_run_without_a_feed_or_with_a_torn_one_has_none(tmp_path: Path) -> None:
    assert read_feed(tmp_path) is None
    (tmp_path / FEED).write_text('{"format": ')

    assert read_feed(tmp_path) is None


def test_a_feed_that_cannot_be_written_is_named(tmp_path: Path) -> None:
    with pytest.raises(StorageError, match=r"live\.json"):
        write_feed(tmp_path / "none", {})


def test_the_log_keeps_what_happened_in_order(tmp_path: Path) -> None:
    log = RunLog(tmp_path)
    log.append("start", utc_ns=1, of=12464)
    log.append("hold", text="stage lost")

    assert read_log(tmp_path) == [
        {"event": "start", "utc_ns": 1, "of": 12464},
        {"event": "hold", "text": "stage lost"},
    ]


def test_a_line_that_a_crash_tore_costs_no_other_line(tmp_path: Path) -> None:
    log = RunLog(tmp_path)
    log.append("start")
    with (tmp_path / LOG).open("ab") as file:
        file.write(b'{"event": "ho')

    log.append("resume")

    assert [entry["event"] for entry in read_log(tmp_path)] == ["start", "resume"]


def test_a_run_without_a_log_has_no_lines(tmp_path: Path) -> None:
    assert read_log(tmp_path) == []


def test_the_digest_is_the_one_of_the_rows_written_out_by_hand(tmp_path: Path) -> None:
    readings = [reading(0), reading(1)]
    rows, gates = b"", b""
    for one in readings:
        rows += struct.pack("<qqqd", one.visit, one.attempt, one.opening, one.position_mm)
        rows += struct.pack("<qqdq", *map(int, one.values), one.live_s, int(one.quality))
        gates += struct.pack("<qq", one.gate_open_ns, one.gate_close_ns)

    dataset = visits_of(tmp_path / "run", readings)

    assert digest(dataset) == hashlib.sha256(rows).hexdigest()
    assert gate_digest(dataset) == hashlib.sha256(gates).hexdigest()


def test_one_count_more_changes_the_digest_and_a_gate_time_only_the_second_one(tmp_path: Path) -> None:
    one = reading(0)
    counted = replace(one, values=(one.values[0] + 1, one.values[1]))
    later = replace(one, gate_open_ns=one.gate_open_ns + 1)

    first, second, third = (visits_of(tmp_path / str(i), [r]) for i, r in enumerate((one, counted, later)))

    assert digest(first) != digest(second)
    assert gate_digest(first) == gate_digest(second)
    assert digest(first) == digest(third)
    assert gate_digest(first) != gate_digest(third)


def test_copies_are_verbatim_and_a_changed_or_missing_one_is_named(tmp_path: Path) -> None:
    texts = {"description.toml": b"a\r\n", "rig.toml": b"b", "dialects/counter.toml": b"c"}
    digests = write_texts(tmp_path, texts, Disk())
    assert changed_texts(tmp_path, digests) == []

    (tmp_path / "rig.toml").write_bytes(b"B")
    (tmp_path / "dialects" / "counter.toml").unlink()

    assert changed_texts(tmp_path, digests) == ["rig.toml", "dialects/counter.toml"]


@pytest.mark.parametrize("name", ["../rig.toml", "/etc/rig.toml", "", "a/../../b"])
def test_a_copy_outside_the_run_folder_is_refused(tmp_path: Path, name: str) -> None:
    with pytest.raises(StorageError, match="does not name a file inside the run folder"):
        write_texts(tmp_path, {name: b""}, Disk())
