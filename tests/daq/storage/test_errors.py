"""Each way in which disk or person can spoil an archive gets one sentence, and no visit before it is lost."""

from __future__ import annotations

import json
import os
import re
import shutil
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import pytest

from daq.errors import StorageError
from daq.storage.disk import Disk
from daq.storage.reader import open_visits, read_meta
from daq.storage.run import Archive, create_run, open_run
from daq.storage.snapshot import JOURNAL, NEWEST
from tests.daq.storage.example import META, planned_visits, reading, started


class FullDisk(Disk):
    """A disk without room for files until `full` is lowered."""

    full = False

    def write(self, path: Path, data: bytes | memoryview) -> None:
        if self.full:
            raise OSError(28, "No space left on device", str(path))
        super().write(path, data)


@contextmanager
def mounted(folder: Path, *options: str) -> Iterator[None]:
    folder.mkdir(exist_ok=True)
    done = subprocess.run(["mount", *options, str(folder)], capture_output=True, check=False)
    if done.returncode:
        pytest.skip(f"needs the right to mount: {done.stderr.decode().strip()}")
    try:
        yield
    finally:
        subprocess.run(["umount", str(folder)], check=True)


def killed_run(folder: Path, chunk: int = 16) -> Path:
    """Return a run of 40 rows as a killed writer leaves it, the whole chunks sealed."""
    with started(folder, chunk=chunk) as archive:
        for visit in range(40):
            archive.commit(reading(visit))
        while archive.seal_next():
            pass
        copy = folder.with_name("killed")
        shutil.copytree(folder, copy)
    return copy


def until_full(archive: Archive, words: str) -> list[int]:
    """Return the rows that were acknowledged before the disk was full."""
    acknowledged: list[int] = []
    with pytest.raises(StorageError, match=words):
        acknowledged.extend(archive.commit(reading(visit)) for visit in range(2400))
    return acknowledged


def flip(path: Path, at: int) -> None:
    data = bytearray(path.read_bytes())
    data[at] ^= 0x10
    path.write_bytes(data)


def test_a_run_folder_below_a_regular_file_is_refused(tmp_path: Path) -> None:
    (tmp_path / "lab").write_text("not a folder")

    with pytest.raises(StorageError, match=r"a part of this path is a file.*Choose another lab folder"):
        started(tmp_path / "lab" / "runs" / "run")


def test_a_folder_that_holds_a_run_already_is_refused_and_kept(tmp_path: Path) -> None:
    with started(tmp_path / "run") as archive:
        archive.commit(reading(0))

    with pytest.raises(StorageError, match="holds a run already"):
        started(tmp_path / "run")

    assert open_visits(tmp_path / "run").sizes["row"] == 1


def test_a_second_writer_is_refused_and_the_first_goes_on(tmp_path: Path) -> None:
    with started(tmp_path / "run") as archive:
        with pytest.raises(StorageError, match="another process writes this run"):
            open_run(tmp_path / "run")
        assert archive.commit(reading(0)) == 0


def test_a_folder_that_does_not_exist_is_named(tmp_path: Path) -> None:
    with pytest.raises(StorageError, match="no such run"):
        open_run(tmp_path / "run")
    with pytest.raises(StorageError, match=r"run.*there is no such run"):
        open_visits(tmp_path / "run")


def test_a_finished_run_is_not_gone_on_with(tmp_path: Path) -> None:
    with started(tmp_path / "run") as archive:
        archive.finish({})

    with pytest.raises(StorageError, match="the run is finished"):
        open_run(tmp_path / "run")
    assert not (tmp_path / "run" / "writer.lock").exists()


@pytest.mark.parametrize("left", ["nothing", "zarr", "texts"])
def test_a_folder_whose_making_was_broken_off_says_so(tmp_path: Path, left: str) -> None:
    started(tmp_path / "run").close()
    (tmp_path / "run" / JOURNAL).unlink()
    if left != "zarr":
        shutil.rmtree(tmp_path / "run" / "run.zarr")
    if left == "nothing":
        (tmp_path / "run" / "description.toml").unlink()

    with pytest.raises(
        StorageError,
        match=r"broken off while its folder was being made.*Start the run again: .*this one may stay",
    ):
        open_run(tmp_path / "run")


def test_a_newer_format_is_refused_by_reader_and_writer(tmp_path: Path) -> None:
    started(tmp_path / "run").close()
    with started(tmp_path / "finished") as archive:
        archive.finish({})
    attributes = tmp_path / "finished" / "run.zarr" / "zarr.json"
    text = json.loads(attributes.read_text())
    text["attributes"]["format"] = 99
    attributes.write_text(json.dumps(text))
    subprocess.run(
        [
            "python3",
            "-c",
            "import sqlite3, sys; c = sqlite3.connect(sys.argv[1], isolation_level=None); c.execute("
            "\"UPDATE state SET value = json_set(value, '$.format', 99) WHERE name = 'meta'\")",
            str(tmp_path / "run" / JOURNAL),
        ],
        check=True,
    )

    for folder in ("run", "finished"):
        with pytest.raises(StorageError, match="has format 99, and this program reads formats up to 1"):
            read_meta(tmp_path / folder)
    with pytest.raises(StorageError, match="has format 99"):
        open_run(tmp_path / "run")


def test_a_reading_that_does_not_fit_is_refused_and_the_next_one_is_taken(tmp_path: Path) -> None:
    good = reading(0)
    bad = [
        replace(good, values=(1.5, 2.0)),
        replace(good, values=(1.0,)),
        replace(good, values=(float("nan"), 1.0)),
        replace(good, values=(-1.0, 1.0)),
        replace(good, sensors={"cellar": (1.0, "degC", 5)}),
        replace(good, encoder_mm={"third": (1.0, 1.0)}),
        replace(good, gate_open_ns=2**63),
    ]

    with started(tmp_path / "run") as archive:
        for one in bad:
            with pytest.raises(StorageError, match=r"does not fit the columns|out of range"):
                archive.commit(one)
        assert archive.commit(good) == 0


def test_a_full_disk_costs_the_visit_it_meets_and_the_same_archive_goes_on_when_there_is_room(
    tmp_path: Path,
) -> None:
    with started(tmp_path / "run", laps=100) as archive:
        pages = archive.journal.setting("page_count")
        archive.journal.setting(f"max_page_count = {pages + 2}")  # SQLite then says that the disk is full
        acknowledged = until_full(archive, "the disk is full.*every visit acknowledged so far is safe")
        assert open_visits(tmp_path / "run").sizes["row"] == len(acknowledged) == archive.rows

        archive.journal.setting("max_page_count = 1073741823")
        archive.commit(reading(len(acknowledged)))
        archive.finish({})

    assert open_visits(tmp_path / "run")["visit"].values.tolist() == list(range(len(acknowledged) + 1))


def test_a_seal_that_finds_no_room_costs_no_visit_and_is_made_up_for(tmp_path: Path) -> None:
    disk = FullDisk()
    with started(tmp_path / "run", chunk=16, disk=disk) as archive:
        disk.full = True
        for visit in range(40):
            archive.commit(reading(visit))
        with pytest.raises(StorageError, match="the disk is full"):
            archive.seal_next()
        assert archive.sealed == 0

        disk.full = False
        archive.finish({})

    assert open_visits(tmp_path / "run")["visit"].values.tolist() == list(range(40))


def test_on_a_full_file_system_no_acknowledged_visit_is_lost_and_the_run_goes_on_after_room_is_made(
    tmp_path: Path,
) -> None:
    with mounted(tmp_path / "small", "-t", "tmpfs", "-o", "size=3m", "tmpfs"):
        run = tmp_path / "small" / "run"
        ballast = tmp_path / "small" / "ballast"
        with started(run, laps=200) as archive:
            free = os.statvfs(run).f_bavail * os.statvfs(run).f_frsize
            ballast.write_bytes(bytes(free - 400_000))
            acknowledged = until_full(archive, "the disk is full")
            assert open_visits(run)["visit"].values.tolist() == acknowledged

            ballast.unlink()
            for visit in range(len(acknowledged), len(acknowledged) + 20):
                archive.commit(reading(visit))
            archive.finish({})

        assert open_visits(run)["visit"].values.tolist() == list(range(len(acknowledged) + 20))


def test_a_read_only_folder_is_named_by_the_writer_and_read_all_the_same(tmp_path: Path) -> None:
    started(tmp_path / "run").close()

    with mounted(tmp_path / "run", "--bind", "-o", "ro", str(tmp_path / "run")):
        with pytest.raises(StorageError, match=r"the folder cannot be written.*not mounted read-only"):
            open_run(tmp_path / "run")
        with pytest.raises(StorageError, match="the folder cannot be written"):
            create_run(tmp_path / "run" / "below", texts={}, itinerary=planned_visits(), meta=META)
        assert open_visits(tmp_path / "run").sizes["row"] == 0


def test_a_flipped_byte_in_a_journal_row_is_named_by_reader_and_writer(tmp_path: Path) -> None:
    with started(tmp_path / "run") as archive:
        for visit in range(40):
            archive.commit(reading(visit))
    journal = tmp_path / "run" / JOURNAL
    closed = reading(20).gate_close_ns.to_bytes(6, "big")
    for found in re.finditer(re.escape(closed), journal.read_bytes()):
        flip(journal, found.start())

    with pytest.raises(StorageError, match="rows 20 of the journal are damaged or missing"):
        open_visits(tmp_path / "run")
    with pytest.raises(StorageError, match="rows 20 of the journal are damaged or missing"):
        open_run(tmp_path / "run")


def test_a_journal_that_is_no_database_any_more_is_named(tmp_path: Path) -> None:
    started(tmp_path / "run").close()
    flip(tmp_path / "run" / JOURNAL, 3)

    with pytest.raises(StorageError, match=r"journal\.sqlite: the journal is damaged"):
        open_run(tmp_path / "run")


def test_a_log_that_sqlite_ends_early_without_a_word_is_noticed_by_the_newest_number(tmp_path: Path) -> None:
    killed = killed_run(tmp_path / "run", chunk=4096)
    wal = killed / f"{JOURNAL}-wal"
    flip(wal, wal.stat().st_size - 100)

    with pytest.raises(StorageError, match=r"the journal ends after row 38, but row 39 was acknowledged"):
        open_visits(killed)
    with pytest.raises(StorageError, match="but row 39 was acknowledged"):
        open_run(killed)

    assert wal.exists()  # the evidence is left alone


def test_without_the_second_place_the_journal_alone_is_believed(tmp_path: Path) -> None:
    killed = killed_run(tmp_path / "run")
    (killed / NEWEST).unlink()

    assert open_visits(killed).sizes["row"] == 40
    with open_run(killed) as archive:
        assert archive.commit(reading(40)) == 40


def test_a_flipped_bit_in_a_chunk_is_named_with_its_array(tmp_path: Path) -> None:
    killed = killed_run(tmp_path / "run")
    chunk = killed / "run.zarr" / "live_s" / "c" / "1"
    flip(chunk, chunk.stat().st_size // 2)

    with pytest.raises(
        StorageError,
        match=r"live_s/c/1 is damaged \(its checksum does not match\): live_s of rows 16 to 31 is lost",
    ):
        open_visits(killed)


def test_a_flipped_bit_in_the_metadata_of_an_array_is_named(tmp_path: Path) -> None:
    killed = killed_run(tmp_path / "run")
    (killed / "run.zarr" / "live_s" / "zarr.json").write_text('{"zarr_format": 3, ')

    with pytest.raises(StorageError, match="live_s"):
        open_visits(killed)


@pytest.mark.parametrize("name", ["values", "opening", "visit", "live_s"])
def test_a_deleted_chunk_reads_as_missing_never_as_zero_counts_or_an_opening(
    tmp_path: Path, name: str
) -> None:
    killed = killed_run(tmp_path / "run")
    part = killed / "run.zarr" / name / "c" / ("0/0" if name == "values" else "0")
    part.unlink()

    with pytest.raises(
        StorageError, match=rf"run\.zarr/{name}/c/0.* is missing: {name} of rows 0 to 15 is lost"
    ):
        open_visits(killed)
    dataset = open_visits(killed, salvage=True)

    column = dataset[name].values
    assert (column[:16] == -1).all() if column.dtype.kind == "i" else (column[:16] != column[:16]).all()
    assert (column[16:] != -1).all()
    assert dataset["use"].values.tolist() == [0] * 16 + [1] * 24
