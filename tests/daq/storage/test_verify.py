"""Every damage is named with its file and what is lost, and the rest is counted as good."""

from __future__ import annotations

import json
import shutil
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from daq.errors import StorageError
from daq.estimate.dataset import estimate_run
from daq.storage.reader import open_visits
from daq.storage.run import create_run
from daq.storage.snapshot import JOURNAL
from daq.storage.verify import Verified, verify
from tests.daq.storage.example import META, TEXTS, planned_visits, reading, started

ESTIMATE = {
    "normalisation": "pairwise",
    "dead_time_s": 40e-9,
    "dead_time_kind": "non-paralysable",
    "planned_pairs": 2,
}


def running(folder: Path) -> Path:
    """Return a run of 40 visits that was broken off, 32 of them sealed."""
    with started(folder, chunk=16) as archive:
        for visit in range(40):
            archive.commit(reading(visit))
        while archive.seal_next():
            pass
    return folder


@pytest.fixture(scope="module")
def whole(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a finished run of 48 visits with its estimate as results."""
    folder = tmp_path_factory.mktemp("whole") / "run"
    meta = {**META, **ESTIMATE}
    with create_run(folder, texts=TEXTS, itinerary=planned_visits(4), meta=meta, chunk=16) as archive:
        for visit in range(48):
            archive.commit(reading(visit))
        archive.finish({"results": estimate_run(open_visits(folder)).to_json()})
    return folder


@pytest.fixture
def finished(whole: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(whole, tmp_path / "run"))


def flip(path: Path) -> None:
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 0x10
    path.write_bytes(data)


def edit(path: Path, change: Callable[[dict[str, object]], object]) -> None:
    text = json.loads(path.read_text())
    change(text)
    path.write_text(json.dumps(text))


def test_a_finished_run_is_whole(finished: Path) -> None:
    assert verify(finished) == Verified(rows=48, visits=48, problems=())


def test_a_run_that_was_broken_off_is_whole(tmp_path: Path) -> None:
    assert verify(running(tmp_path / "run")) == Verified(rows=40, visits=40, problems=())


def test_there_must_be_a_run(tmp_path: Path) -> None:
    with pytest.raises(StorageError, match="no such run"):
        verify(tmp_path / "run")


@pytest.mark.parametrize("harm", [Path.unlink, flip])
def test_a_chunk_that_is_missing_or_damaged_is_named_once_with_the_rows_that_are_lost(
    finished: Path, harm: Callable[[Path], None]
) -> None:
    harm(finished / "run.zarr" / "values" / "c" / "1" / "0")

    found = verify(finished)

    assert len(found.problems) == 1
    assert found.problems[0].startswith("run.zarr/values/c/1/0 is ")
    assert found.problems[0].endswith("values of rows 16 to 31 is lost")
    assert (found.rows, found.visits) == (48, 32)


def test_a_damaged_chunk_of_a_run_that_goes_on_is_named(tmp_path: Path) -> None:
    folder = running(tmp_path / "run")
    flip(folder / "run.zarr" / "live_s" / "c" / "0")

    found = verify(folder)

    assert len(found.problems) == 1
    assert "live_s of rows 0 to 15 is lost" in found.problems[0]
    assert (found.rows, found.visits) == (40, 24)


def test_a_bit_in_the_metadata_that_leaves_it_readable_is_named(finished: Path) -> None:
    edit(finished / "run.zarr" / "live_s" / "zarr.json", lambda text: text.update(attributes={"units": "ms"}))

    found = verify(finished)

    assert found.problems == (
        "run.zarr/live_s/zarr.json is changed; it was written when the run was finished",
    )
    assert found.visits == 48


def test_metadata_that_cannot_be_read_cost_their_array(finished: Path) -> None:
    (finished / "run.zarr" / "live_s" / "zarr.json").write_text("{")

    found = verify(finished)

    assert len(found.problems) == 1
    assert "run.zarr/live_s/zarr.json is damaged: live_s of rows 0 to 47 is lost" in found.problems[0]
    assert (found.rows, found.visits) == (48, 0)


def test_a_missing_chunk_of_the_itinerary_is_named(finished: Path) -> None:
    (finished / "run.zarr" / "itinerary" / "stand" / "c" / "0").unlink()

    assert verify(finished).problems == (
        "run.zarr/itinerary/stand/c/0 is missing: stand of planned visits 0 to 47 is lost",
    )


@pytest.mark.parametrize("made", [running, None])
def test_a_changed_copy_of_the_description_is_named(
    made: Callable[[Path], Path] | None, finished: Path, tmp_path: Path
) -> None:
    folder = made(tmp_path / "broken-off") if made else finished
    (folder / "description.toml").write_bytes(b"schema = 2\n")

    assert verify(folder).problems == ("description.toml is no longer what was written",)


def test_a_missing_list_of_files_is_named(finished: Path) -> None:
    (finished / "sha256.txt").unlink()

    assert "the list of files cannot be read" in verify(finished).problems[0]


def test_a_damaged_row_of_the_journal_is_named_and_the_others_are_good(tmp_path: Path) -> None:
    folder = running(tmp_path / "run")
    journal = folder / JOURNAL
    closed, data = reading(36).gate_close_ns.to_bytes(6, "big"), journal.read_bytes()
    journal.write_bytes(data.replace(closed, b"\x00\x01" + closed[2:]))

    found = verify(folder)

    assert "rows 36 of the journal are damaged or missing" in found.problems[0]
    assert (found.rows, found.visits) == (40, 39)
    assert "7 rows of the journal are whole" in found.good


def test_a_journal_that_is_no_database_leaves_the_sealed_visits(tmp_path: Path) -> None:
    folder = running(tmp_path / "run")
    flip_at_start = bytearray((folder / JOURNAL).read_bytes())
    flip_at_start[3] ^= 1
    (folder / JOURNAL).write_bytes(flip_at_start)

    found = verify(folder)

    assert "the journal is damaged" in found.problems[0]
    assert "the 32 visits sealed before it" in found.problems[0]
    assert found.visits == 32


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"opening": 3}, "row 5 has opening AB, and A was planned"),
        ({"position_mm": 0.25}, "row 5 has position_mm 0.25, and 0 was planned"),
        ({"dwell_s": 2.5}, "row 5 has dwell_s 2.5, and 2 was planned"),
        ({"visit": 500}, "visit 500 was made, and 48 were planned"),
    ],
)
def test_a_visit_that_is_not_the_planned_one_is_named(
    tmp_path: Path, change: dict[str, float], words: str
) -> None:
    readings = [reading(visit) for visit in range(8)]
    readings[5] = replace(readings[5], **change)  # type: ignore[arg-type]
    with started(tmp_path / "run") as archive:
        for one in readings:
            archive.commit(one)

    assert verify(tmp_path / "run").problems == (words,)


def rewritten(folder: Path, change: Callable[[dict[str, object]], object]) -> None:
    """Change the root's attributes and the list of files with them, as somebody who cheats would."""
    edit(folder / "run.zarr" / "zarr.json", change)
    import hashlib

    digest = hashlib.sha256((folder / "run.zarr" / "zarr.json").read_bytes()).hexdigest()
    lines = (folder / "sha256.txt").read_text().splitlines(keepends=True)
    changed = [
        f"{digest}  run.zarr/zarr.json\n" if line.endswith("  run.zarr/zarr.json\n") else line
        for line in lines
    ]
    (folder / "sha256.txt").write_text("".join(changed))


def test_a_kappa_that_the_visits_do_not_give_is_named(finished: Path) -> None:
    rewritten(finished, lambda text: text["attributes"]["results"].update(kappa=0.5))  # type: ignore[index]

    assert "kappa is " in verify(finished).problems[0]
    assert "and was 0.5 when the run was finished" in verify(finished).problems[0]


def test_a_digest_that_the_visits_do_not_give_is_named(finished: Path) -> None:
    rewritten(finished, lambda text: text["attributes"].update(digest="0" * 64))  # type: ignore[attr-defined]

    assert verify(finished).problems == (
        "the digest of the visits is not the one written when the run was finished",
    )
