"""Of a damaged run everything that is still good can be had, and nobody is told to remove a folder."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest

from daq.errors import StorageError
from daq.storage.log import read_log
from daq.storage.reader import open_visits, read_meta
from daq.storage.snapshot import JOURNAL
from daq.storage.verify import verify
from tests.daq.storage.example import reading, started

PAGE = 4096


def broken_off(folder: Path, chunk: int = 16) -> Path:
    """Return a run of 200 visits that was broken off, whole chunks sealed."""
    with started(folder, chunk=chunk, laps=20) as archive:
        for visit in range(200):
            archive.commit(reading(visit))
        while archive.seal_next():
            pass
    return folder


def finished(folder: Path) -> Path:
    with started(folder, chunk=16) as archive:
        for visit in range(48):
            archive.commit(reading(visit))
        archive.finish({})
    return folder


def test_a_row_with_a_flipped_bit_is_left_out_and_every_other_one_is_given(tmp_path: Path) -> None:
    folder = broken_off(tmp_path / "run", chunk=4096)
    journal, closed = folder / JOURNAL, reading(36).gate_close_ns.to_bytes(6, "big")
    journal.write_bytes(journal.read_bytes().replace(closed, b"\x00\x01" + closed[2:]))

    visits = open_visits(folder, salvage=True)

    assert visits["visit"].values.tolist() == [visit for visit in range(200) if visit != 36]
    assert visits.attrs["damaged"] == ["journal.sqlite: rows 36 of the journal are damaged or missing"]
    assert visits["use"].values.tolist() == [int(visit // 4 != 9) for visit in range(200) if visit != 36]


def test_a_page_of_zeros_costs_the_rows_that_stood_in_it(tmp_path: Path) -> None:
    folder = broken_off(tmp_path / "run", chunk=4096)
    journal = folder / JOURNAL
    data = bytearray(journal.read_bytes())
    at = data.index(reading(100).gate_close_ns.to_bytes(6, "big")) // PAGE * PAGE
    data[at : at + PAGE] = bytes(PAGE)
    journal.write_bytes(data)

    with pytest.raises(StorageError, match="the journal is damaged"):
        open_visits(folder)
    found = verify(folder)
    visits = open_visits(folder, salvage=True)["visit"].values

    assert 100 not in visits
    assert found.visits == len(visits) > 200 - PAGE // 100  # a row takes more than 100 bytes
    assert found.rows == 200


def test_sealed_visits_are_given_when_the_journal_is_gone(tmp_path: Path) -> None:
    folder = broken_off(tmp_path / "run")
    (folder / JOURNAL).unlink()

    with pytest.raises(StorageError, match=r"the journal is missing.*Keep the folder"):
        open_visits(folder)
    visits = open_visits(folder, salvage=True)

    assert visits["visit"].values.tolist() == list(range(192))
    assert visits.attrs["damaged"] == [
        "journal.sqlite is missing, and with it every visit that was not sealed"
    ]


@pytest.mark.parametrize("harm", ["missing", "damaged"])
def test_a_lost_root_costs_the_results_and_no_visit(tmp_path: Path, harm: str) -> None:
    folder = finished(tmp_path / "run")
    root = folder / "run.zarr" / "zarr.json"
    root.write_text("{") if harm == "damaged" else root.unlink()

    with pytest.raises(StorageError, match=rf"zarr\.json is {harm}, and its visits are still there"):
        open_visits(folder)
    found = verify(folder)

    assert open_visits(folder, salvage=True)["visit"].values.tolist() == list(range(48))
    assert (found.rows, found.visits) == (48, 48)
    assert found.problems == (
        f"run.zarr/zarr.json is {harm}: the results of the run are lost; "
        "what it is stands in record.json too",
    )


def test_without_a_second_record_a_lost_root_is_an_error_that_keeps_the_folder(tmp_path: Path) -> None:
    folder = finished(tmp_path / "run")
    (folder / "run.zarr" / "zarr.json").unlink()
    (folder / "record.json").unlink()

    with pytest.raises(StorageError, match=r"visits are still there\. Keep the folder as it is"):
        verify(folder)


def test_a_lab_is_called_a_lab_and_its_newest_run_is_named(tmp_path: Path) -> None:
    finished(tmp_path / "runs" / "20261201T170000Z-lantern")

    for path in (tmp_path, tmp_path / "runs"):
        with pytest.raises(StorageError, match=r"a lab, not a run\. Name one of its runs: .*-lantern"):
            read_meta(path)
        with pytest.raises(StorageError, match="a lab, not a run"):
            verify(path)


def test_a_folder_without_anything_of_a_run_says_so(tmp_path: Path) -> None:
    (tmp_path / "photos").mkdir()

    with pytest.raises(StorageError, match="this folder holds no run"):
        verify(tmp_path / "photos")


def test_the_log_of_a_run_that_does_not_exist_is_no_empty_log(tmp_path: Path) -> None:
    with pytest.raises(StorageError, match="there is no such run"):
        read_log(tmp_path / "run")


def test_salvage_of_a_whole_run_is_the_run(tmp_path: Path) -> None:
    folder = finished(tmp_path / "run")
    copy = tmp_path / "copy"
    shutil.copytree(folder, copy)

    assert open_visits(copy, salvage=True).identical(open_visits(folder))
