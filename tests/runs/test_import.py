"""A table of visits from elsewhere is estimated and replayed like a run of our own, or refused whole."""

from __future__ import annotations

import csv
import json
import shutil
from pathlib import Path
from typing import Any

import pytest

from daq.cli import main
from daq.storage.reader import open_visits
from tests.examples import CONFIGS

NAMES = {"none": "shut"}


@pytest.fixture(scope="module")
def bench(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, dict[str, Any]]:
    """Return a folder with a table in somebody else's words, its mapping, and the figures of its run."""
    folder = tmp_path_factory.mktemp("elsewhere")
    for part in ("rigs", "tables"):
        shutil.copytree(CONFIGS / part, folder / part)
    text = (CONFIGS / "lantern.toml").read_text()
    text = text.replace("number = 41", "number = 5").replace("laps = 38", "laps = 8")
    (folder / "lantern.toml").write_text(text)
    words = ["--seed", "7", "--link", "direct", "--into", str(folder / "lab")]
    assert main(["rehearse", str(folder / "lantern.toml"), *words]) == 0
    (run,) = (folder / "lab" / "runs").iterdir()
    assert main(["export", str(run), str(folder / "ours.csv")]) == 0
    with (folder / "ours.csv").open(newline="") as ours:
        rows = [_theirs(row) for row in csv.DictReader(ours)]
    _write(folder / "visits.csv", rows)
    return folder, {"run": run, "visits": open_visits(run)}


def _theirs(row: dict[str, str]) -> dict[str, str]:
    return {
        "when": row["row"],
        "mask": NAMES.get(row["opening_name"], row["opening_name"]),
        "y_um": repr(float(row["position_mm"]) * 1000),
        "time_s": row["live_s"],
        "n": row["values_0"],
        "at_s": repr(int(row["gate_open_ns"]) / 1e9),
    }


def _write(path: Path, rows: list[dict[str, str]]) -> None:
    with path.open("w", newline="") as file:
        table = csv.DictWriter(file, list(rows[0]))
        table.writeheader()
        table.writerows(rows)


def take_in(folder: Path, lab: Path, capsys, table: str = "visits.csv") -> tuple[int, dict[str, Any]]:
    capsys.readouterr()
    mapping = folder / "tables" / "visits-elsewhere.toml"
    status = main(["import", str(folder / table), str(mapping), "--into", str(lab), "--json"])
    return status, json.loads(capsys.readouterr().out)


def test_a_table_gives_the_residual_of_the_run_that_it_came_from(bench, tmp_path, capsys):
    folder, made = bench
    status, figures = take_in(folder, tmp_path, capsys)
    capsys.readouterr()
    main(["report", str(made["run"]), "--json"])
    ours = json.loads(capsys.readouterr().out)

    assert status == 0
    assert figures["kind"] == "import"
    for name in ("kappa", "kappa_se", "kappa_counting_se", "pairs"):
        assert figures[name] == pytest.approx(ours[name], rel=1e-9), name
    visits = open_visits(figures["run"])
    for name in ("visit", "opening", "position_mm", "values", "live_s", "stand", "lap", "pair"):
        assert (visits[name].values == made["visits"][name].values).all(), name


def test_what_was_taken_in_verifies_keeps_the_table_and_is_replayed(bench, tmp_path, capsys):
    folder, _ = bench
    _, figures = take_in(folder, tmp_path, capsys)
    run = Path(figures["run"])

    assert main(["verify", str(run)]) == 0
    assert (run / "table.csv").read_bytes() == (folder / "visits.csv").read_bytes()
    capsys.readouterr()
    status = main(["replay", str(run), "--into", str(tmp_path), "--link", "direct", "--json"])
    again = json.loads(capsys.readouterr().out)
    assert status == 0
    assert again["same_digest"] and again["same_times"]


def test_a_stand_that_lacks_an_opening_is_left_out_and_the_rest_is_estimated(bench, tmp_path, capsys):
    folder, _ = bench
    with (folder / "visits.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    _write(folder / "torn.csv", rows[:-3])

    status, figures = take_in(folder, tmp_path, capsys, "torn.csv")

    assert status == 0
    assert figures["visits_missing"] == 3
    assert figures["pairs"] == 3  # of four


@pytest.mark.parametrize(
    ("change", "words"),
    [
        (
            lambda text: text.replace("mask", "aperture", 1),
            "there is no column 'mask' (opening). Its columns",
        ),
        (lambda text: text.replace("ABC", "ABD"), "line 6, column 'mask': 'ABD' is no opening of the rig."),
        (lambda text: text.replace(",2.2,", ",two,", 1), "line 2, column 'time_s': 'two' is not a number"),
        (lambda text: text.replace(",2.2,", ",-2.2,", 1), "'-2.2' is not a number of 0 or more"),
        (lambda text: "", "there is no column"),
        (lambda text: text.splitlines()[0], "it holds no visit"),
        (lambda text: text.replace("12800.0", "1e9"), "lies outside the limits"),
    ],
)
def test_a_table_that_cannot_be_read_is_a_sentence_and_nothing_is_written(
    bench, tmp_path, capsys, change, words
):
    folder, _ = bench
    (folder / "bad.csv").write_text(change((folder / "visits.csv").read_text()))

    status, figures = take_in(folder, tmp_path / "lab", capsys, "bad.csv")

    assert status == 2
    assert words in " ".join(figures["problems"])
    assert not (tmp_path / "lab").exists()


def test_a_mapping_that_cannot_be_meant_is_a_sentence(bench, tmp_path, capsys):
    folder, _ = bench
    mapping = folder / "tables" / "bad.toml"
    text = (folder / "tables" / "visits-elsewhere.toml").read_text()
    mapping.write_text(text.replace('live_s = "time_s"', 'live = "time_s"'))
    capsys.readouterr()

    status = main(["import", str(folder / "visits.csv"), str(mapping), "--into", str(tmp_path / "lab")])

    assert status == 2
    assert "Did you mean 'live_s'?" in capsys.readouterr().err
