from __future__ import annotations

from pathlib import Path

from daq.storage.space import FIXED_BYTES, free_bytes, needed_bytes
from tests.daq.storage.example import reading, started


def size(folder: Path) -> int:
    return sum(path.stat().st_size for path in folder.rglob("*") if path.is_file())


def test_a_run_takes_no_more_room_than_forecast_at_any_moment(tmp_path: Path) -> None:
    with started(tmp_path / "run", chunk=512, laps=200) as archive:
        for visit in range(2000):
            archive.commit(reading(visit))
        at_work = size(tmp_path / "run")
        archive.finish({})

    assert at_work <= needed_bytes(2000, chunk=512)
    assert size(tmp_path / "run") <= needed_bytes(2000, chunk=512) - FIXED_BYTES


def test_events_need_room_of_their_own() -> None:
    assert needed_bytes(0, chunk=4096, events=10**9) - needed_bytes(0, chunk=4096) == 4 * 10**9


def test_the_room_of_a_folder_that_does_not_exist_yet_is_that_of_its_disk(tmp_path: Path) -> None:
    there, not_yet = free_bytes(tmp_path), free_bytes(tmp_path / "a" / "b")

    assert abs(there - not_yet) < 0.05 * there  # other programs write meanwhile
    assert there > 0
