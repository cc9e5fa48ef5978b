"""List mode: no event of an acknowledged visit is lost, wherever it stands when it is asked for."""

from __future__ import annotations

import shutil
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import xarray as xr

from daq.errors import StorageError
from daq.storage.disk import Disk
from daq.storage.events import Piece, read_events
from daq.storage.layout import EVENTS
from daq.storage.reader import open_visits
from daq.storage.run import Archive, open_run
from daq.storage.snapshot import JOURNAL
from daq.storage.verify import verify
from tests.daq.storage.example import listed, reading, started, ticks_of


def list_run(folder: Path, tick_s: float = 1e-9) -> Archive:
    return started(folder, chunk=16, tick_s=tick_s)


def assert_events(folder: Path, visits: int) -> None:
    for visit, ticks in enumerate(read_events(folder, range(visits))):
        np.testing.assert_array_equal(ticks, ticks_of(visit), err_msg=str(visit))


def test_events_come_back_while_the_run_goes_on_whether_in_a_chunk_or_in_the_journal(tmp_path: Path) -> None:
    with list_run(tmp_path / "run") as archive:
        for visit in range(23):
            archive.commit(listed(visit))

        assert_events(tmp_path / "run", 23)


def test_events_are_taken_in_pieces_while_the_gate_is_open(tmp_path: Path) -> None:
    ticks = ticks_of(4).astype("<u8")

    with list_run(tmp_path / "run") as archive:
        for part in (ticks[:300], ticks[300:]):
            archive.append_events(part.tobytes())
        archive.commit(reading(0))

        np.testing.assert_array_equal(read_events(tmp_path / "run", [0])[0], ticks)


def test_a_run_in_list_mode_is_gone_on_with_and_finished_into_one_plain_array(tmp_path: Path) -> None:
    with list_run(tmp_path / "run") as archive:
        for visit in range(13):
            archive.commit(listed(visit))
    with open_run(tmp_path / "run") as archive:
        for visit in range(13, 24):
            archive.commit(listed(visit))
        archive.finish({})

    plain = xr.open_zarr(tmp_path / "run" / "run.zarr", chunks=None)
    gaps, start, count = (plain[name].values for name in (EVENTS, "event_start", "event_count"))

    assert_events(tmp_path / "run", 24)
    assert len(gaps) == sum(len(ticks_of(visit)) for visit in range(24))
    for visit in range(24):
        mine = gaps[start[visit] : start[visit] + count[visit]]
        np.testing.assert_array_equal(np.cumsum(mine, dtype=np.int64), ticks_of(visit))


def test_a_finished_run_gives_its_events_lazily_beside_the_visits(tmp_path: Path) -> None:
    with list_run(tmp_path / "run") as archive:
        archive.commit(listed(4))
        archive.finish({})

    dataset = open_visits(tmp_path / "run")

    assert not dataset[EVENTS].variable._in_memory
    assert dataset[EVENTS].attrs["units"] == "1e-09 s"
    np.testing.assert_array_equal(np.cumsum(dataset[EVENTS].values, dtype=np.int64), ticks_of(4))


def test_events_of_a_visit_that_is_given_up_are_not_taken_for_the_next_one(tmp_path: Path) -> None:
    with list_run(tmp_path / "run") as archive:
        archive.append_events(ticks_of(4).tobytes())
        archive.drop_events()
        archive.commit(listed(1))

        np.testing.assert_array_equal(read_events(tmp_path / "run", [0])[0], ticks_of(1))


def test_events_of_a_visit_that_could_not_be_stored_are_dropped_with_it(tmp_path: Path) -> None:
    with list_run(tmp_path / "run") as archive:
        archive.commit(listed(4))
        with pytest.raises(StorageError, match="does not fit the columns"):
            archive.commit(replace(listed(4), values=(1.5, 1.0)))
        archive.commit(listed(2))

        np.testing.assert_array_equal(read_events(tmp_path / "run", [0])[0], ticks_of(4))
        np.testing.assert_array_equal(read_events(tmp_path / "run", [1])[0], ticks_of(2))


def test_gaps_take_32_bits_where_the_longest_dwell_fits_and_64_where_not(tmp_path: Path) -> None:
    with list_run(tmp_path / "ns") as fine, list_run(tmp_path / "ps", 1e-12) as finest:
        kinds = [archive.meta["list_mode"]["kind"] for archive in (fine, finest)]
        finest.commit(replace(reading(0), events=np.array([2**40], "<u8").tobytes()))

        assert read_events(tmp_path / "ps", [0])[0].tolist() == [2**40]
    assert kinds == ["int32", "int64"]


@pytest.mark.parametrize("ticks", [[5, 4], [2**31], [2**63 + 5]])
def test_times_that_run_backwards_or_do_not_fit_are_refused(tmp_path: Path, ticks: list[int]) -> None:
    with list_run(tmp_path / "run") as archive:
        with pytest.raises(StorageError, match="the event times do not ascend, or lie too far apart"):
            archive.commit(replace(reading(0), events=np.array(ticks, "<u8").tobytes()))
        assert archive.commit(listed(3)) == 0


def test_events_without_list_mode_are_refused_not_lost_in_silence(tmp_path: Path) -> None:
    with started(tmp_path / "run") as archive:
        with pytest.raises(StorageError, match="not begun in list mode"):
            archive.commit(listed(1))
        with pytest.raises(StorageError, match="not begun in list mode"):
            archive.append_events(b"")
        archive.drop_events()
        archive.commit(reading(1))
        with pytest.raises(StorageError, match="not made in list mode"):
            read_events(tmp_path / "run", [0])[0]


def test_damaged_events_in_the_journal_are_named(tmp_path: Path) -> None:
    with list_run(tmp_path / "run") as archive:
        archive.commit(listed(2))
    gaps = np.diff(ticks_of(2).astype(np.int64), prepend=0).astype(np.int32)
    packed = Piece(first=0, count=100, sealed=0, rest=gaps, moved=False).packed
    journal = tmp_path / "run" / JOURNAL
    data = journal.read_bytes()
    assert packed in data
    journal.write_bytes(data.replace(packed, packed[:-1] + bytes([packed[-1] ^ 1])))

    with pytest.raises(StorageError, match="the events of row 0 in the journal are damaged"):
        read_events(tmp_path / "run", [0])[0]


def test_a_copy_of_the_folder_of_a_running_archive_holds_every_event(tmp_path: Path) -> None:
    with list_run(tmp_path / "run") as archive:
        for visit in range(10):
            archive.commit(listed(visit))
        shutil.copytree(tmp_path / "run", tmp_path / "killed")

    assert_events(tmp_path / "killed", 10)
    with open_run(tmp_path / "killed") as archive:
        archive.commit(listed(10))
    assert_events(tmp_path / "killed", 11)


def test_a_missing_chunk_of_events_is_named_and_costs_no_visit(tmp_path: Path) -> None:
    with list_run(tmp_path / "run") as archive:
        for visit in range(10):
            archive.commit(listed(visit))
        archive.finish({})
    (tmp_path / "run" / "run.zarr" / EVENTS / "c" / "1").unlink()

    found = verify(tmp_path / "run")

    assert found.problems == ("run.zarr/event_gap/c/1 is missing: event_gap of events 256 to 511 is lost",)
    assert found.visits == 10


class Stopped(Disk):
    """A disk at which somebody presses Ctrl-C when the events of a visit are written."""

    armed = False

    def step(self, name: str) -> None:
        if self.armed and name == "events":
            self.armed = False
            raise KeyboardInterrupt


def test_a_visit_that_a_stop_broke_off_leaves_no_event_behind(tmp_path: Path) -> None:
    disk = Stopped()
    with started(tmp_path / "run", chunk=16, tick_s=1e-9, disk=disk) as archive:
        archive.commit(listed(2))
        disk.armed = True
        with pytest.raises(KeyboardInterrupt):
            archive.commit(listed(4))

        assert archive.commit(listed(3)) == 1

        for row, visit in enumerate((2, 3)):
            np.testing.assert_array_equal(read_events(tmp_path / "run", [row])[0], ticks_of(visit))
