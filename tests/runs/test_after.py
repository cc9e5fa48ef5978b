"""What is done with a run afterwards: verify, note, accept, on a rehearsed run."""

from __future__ import annotations

import json
import shutil
from pathlib import Path
from typing import Any

import pytest
import zarr
import zarr.storage

from daq.cli import main
from daq.storage.log import read_log
from daq.storage.reader import read_meta


@pytest.fixture(scope="module")
def original(tmp_path_factory: pytest.TempPathFactory) -> Path:
    lab = tmp_path_factory.mktemp("lab")
    main(["rehearse", "--hours", "1.1", "--seed", "3", "--link", "direct", "--into", str(lab)])
    (folder,) = (lab / "runs").iterdir()
    return folder


@pytest.fixture
def run(original: Path, tmp_path: Path) -> Path:
    return Path(shutil.copytree(original, tmp_path / original.name))


def flip(path: Path) -> None:
    data = bytearray(path.read_bytes())
    data[len(data) // 2] ^= 1
    path.write_bytes(data)


def answer(capsys, *words: str) -> tuple[int, dict]:
    status = main([*words, "--json"])
    return status, json.loads(capsys.readouterr().out)


def test_a_sound_run_verifies(run, capsys):
    status, figures = answer(capsys, "verify", str(run))

    assert status == 0
    assert figures == {"ok": True, "visits": 1312, "rows": 1312, "problems": []}


@pytest.mark.parametrize("file", ["run.zarr/values/c/0/0", "run.zarr/live_s/c/0", "description.toml"])
def test_one_flipped_byte_is_named(run, capsys, file):
    flip(run / file)

    status, figures = answer(capsys, "verify", str(run))

    assert status == 4
    assert any(file in problem for problem in figures["problems"])


@pytest.mark.parametrize(("harm", "how"), [(Path.unlink, "is missing"), (flip, "is damaged")])
def test_a_report_on_a_damaged_archive_says_so_first_and_gives_the_rest(run, capsys, harm, how):
    main(["report", str(run), "--json"])
    recorded = json.loads(capsys.readouterr().out)["kappa"]
    harm(run / "run.zarr/live_s/c/0")

    status = main(["report", str(run)])
    told = capsys.readouterr().out.splitlines()

    assert status == 4
    assert told[0].startswith("DAMAGED: a part of this archive is lost.")
    assert recorded > 0
    assert f"When it was finished, kappa was {recorded:+.3e}." in told[0]
    assert told[1].startswith(f"! run.zarr/live_s/c/0 {how}")
    assert told[1].endswith("live_s of rows 0 to 1311 is lost.")
    assert "b'" not in "".join(told)


@pytest.mark.parametrize("words", ["export {run} {run}/visits.csv", "pack {run}", "accept {run} counts"])
def test_what_stands_for_a_whole_run_is_not_made_of_a_damaged_one(run, capsys, words):
    flip(run / "run.zarr/live_s/c/0")

    status = main(words.format(run=run).split())

    assert status == 4
    assert "live_s of rows 0 to 1311 is lost. `tercet report` gives" in capsys.readouterr().err


@pytest.mark.parametrize("command", ["log", "report", "verify", "status", "bookings"])
def test_a_path_that_leads_nowhere_is_an_error(tmp_path, capsys, command):
    status = main([command, str(tmp_path / "lab")])

    assert status == 4
    assert "there is no such" in capsys.readouterr().err


def test_a_result_that_the_counts_do_not_give_is_named(run, capsys):
    root = run / "run.zarr" / "zarr.json"
    meta = json.loads(root.read_text())
    meta["attributes"]["results"]["kappa"] += 1e-9
    root.write_text(json.dumps(meta))

    status, figures = answer(capsys, "verify", str(run))

    assert status == 4
    assert figures["problems"]


def test_a_note_is_added_and_nothing_else_changes(run, capsys):
    before = read_log(run)

    status, entry = answer(capsys, "note", str(run), "the door was open at 2", "--by", "night watch")

    assert status == 0
    assert read_log(run)[:-1] == before
    assert read_log(run)[-1]["text"] == entry["text"] == "the door was open at 2"
    assert answer(capsys, "verify", str(run))[0] == 0


def test_an_empty_note_is_refused(run, capsys):
    status, figures = answer(capsys, "note", str(run), "  ")

    assert status == 2
    assert "the note is empty" in figures["problems"][0]


def test_a_verdict_is_bound_to_the_counts(run, capsys):
    status, entry = answer(capsys, "accept", str(run), "counts in part", "--by", "night watch")

    assert status == 0
    assert entry["digest"] == read_meta(run)["digest"]
    assert entry["verdict"] == "counts in part"


def test_the_record_says_what_was_done_with_which_devices_and_which_program(run):
    meta = read_meta(run)

    wanted = "id name title purpose kind clock set_up devices software order seed wishes started_utc notes"
    assert set(wanted.split()) <= set(meta)
    assert meta["devices"]["counter"]["identity"]
    assert set(meta["devices"]["stages"]["identity"]) == {"mask", "detector"}
    assert meta["set_up"]["slits"]["A"]["width_m"] == 40e-6
    assert set(meta["texts_sha256"]) == {"description.toml", "rig.toml"}
    assert meta["results"]["pairs"] == 2


def test_a_bag_is_whole_and_one_flipped_byte_is_named(run, capsys, tmp_path):
    bag = tmp_path / "night.bag"
    assert answer(capsys, "pack", str(run), "--to", str(bag)) == (0, {"ok": True, "packed": str(bag)})
    assert answer(capsys, "pack", str(bag)) == (0, {"ok": True, "problems": []})
    file = bag / "data" / "visits.csv"
    file.write_bytes(file.read_bytes().replace(b"1", b"2", 1))

    status, figures = answer(capsys, "pack", str(bag))

    assert status == 4
    assert "visits.csv" in figures["problems"][0]


def test_a_zip_of_a_run_opens_with_zarr_alone(run, capsys, tmp_path):
    status, figures = answer(capsys, "pack", str(run), "--zip")

    group: Any = zarr.open_group(zarr.storage.ZipStore(figures["packed"], mode="r"), mode="r")
    assert status == 0
    assert group["values"].shape == (1312, 1)


@pytest.mark.parametrize("name", ["visits.csv", "visits.nc"])
def test_visits_are_exported_by_the_ending_of_the_file(run, capsys, tmp_path, name):
    status, _ = answer(capsys, "export", str(run), str(tmp_path / name))

    assert status == 0
    assert (tmp_path / name).stat().st_size > 10_000


def test_an_ending_that_names_no_format_is_refused(run, capsys, tmp_path):
    status, figures = answer(capsys, "export", str(run), str(tmp_path / "visits.xls"))

    assert status == 2
    assert "end the name in .csv or .nc" in figures["problems"][0]


def test_an_export_into_a_folder_that_is_not_there_says_so(run, capsys, tmp_path):
    status, figures = answer(capsys, "export", str(run), str(tmp_path / "gone" / "visits.csv"))

    assert status == 2
    assert "there is no such folder. Make it first." in figures["problems"][0]
