"""An archived run played again: the same counts, times and flags, or what a change changes, no more."""

from __future__ import annotations

import json
import re
import shutil
from pathlib import Path
from typing import Any

import pytest

from daq.cli import main
from daq.storage.feed import read_feed
from daq.storage.log import read_log
from daq.storage.reader import open_visits, read_meta
from tests.examples import CONFIGS

# Links lost and replies spoilt, an axis that slips (its stand is repeated by rule), a gate that overflows, a
# clock that is set: everything that leaves a trace in the rows.
SCRIPT = """
seed = 5
[[fault]]
device = "counter"
kind = "silent"
per_hour = 30
[[fault]]
device = "counter"
kind = "drop"
at_s = 500
seconds = 12
[[fault]]
device = "stages"
kind = "drop"
at_s = 900
seconds = 5
[[fault]]
axis = "detector"
kind = "slip"
size_mm = 0.1
at_s = 700
[[fault]]
device = "counter"
kind = "overflow"
at_gate = 90
[[fault]]
kind = "clock-step"
step_s = -4.0
at_s = 1000
"""


@pytest.fixture(scope="module")
def source(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a rehearsed night of 480 visits at ten positions, with faults."""
    folder = tmp_path_factory.mktemp("night")
    shutil.copytree(CONFIGS / "rigs", folder / "rigs")
    text = (CONFIGS / "lantern.toml").read_text()
    text = text.replace("number = 41", "number = 10").replace("laps = 38", "laps = 6")
    (folder / "short.toml").write_text(text)
    (folder / "faults.toml").write_text(SCRIPT)
    words = ["--seed", "7", "--link", "direct", "--faults", str(folder / "faults.toml")]
    assert main(["rehearse", str(folder / "short.toml"), *words, "--into", str(folder / "lab")]) == 0
    (run,) = (folder / "lab" / "runs").iterdir()
    return run


def replay(source: Path, lab: Path, capsys, *words: str) -> tuple[int, dict[str, Any]]:
    capsys.readouterr()
    status = main(["replay", str(source), "--into", str(lab), "--link", "direct", "--json", *words])
    return status, json.loads(capsys.readouterr().out)


def events(run: Path, event: str) -> list[int]:
    return [entry["run_ns"] for entry in read_log(run) if entry["event"] == event]


def changed(figures: dict[str, Any]) -> set[str]:
    return {row["figure"] for row in figures["differences"] if not row["same"]}


@pytest.mark.parametrize("link", ["direct", "tcp"])
def test_a_replay_is_the_archived_run_row_by_row_with_its_faults(source, tmp_path, capsys, link):
    status, figures = replay(source, tmp_path, capsys, "--link", link)
    old, new = open_visits(source), open_visits(figures["run"])

    assert status == 0
    assert len(events(source, "fault")) > 5
    assert sorted(set(old["reason"].values)) == [0, 2, 3]
    for name in old:
        assert new[name].equals(old[name]), name
    assert figures["same_digest"] and figures["same_times"]
    assert changed(figures) == set()
    assert len(events(Path(figures["run"]), "fault")) == len(events(source, "fault"))


def test_the_record_and_the_page_say_that_it_is_a_replay(source, tmp_path, capsys):
    _, figures = replay(source, tmp_path, capsys)
    meta, feed = read_meta(Path(figures["run"])), read_feed(Path(figures["run"]))

    assert feed is not None
    assert meta["kind"] == feed["kind"] == "replay"
    assert meta["replay_of"]["run"] == source.name
    assert meta["replay_of"]["digest"] == read_meta(source)["digest"]
    assert meta["id"] != read_meta(source)["id"]
    assert meta["stop"] == read_meta(source)["stop"]
    assert main(["report", figures["run"]]) == 0
    assert "A replay of an archived run." in capsys.readouterr().out
    assert main(["verify", figures["run"]]) == 0
    assert main(["rehearse", "--resume", figures["run"]]) == 4


def test_another_dead_time_changes_the_estimate_and_no_count(source, tmp_path, capsys):
    _, figures = replay(source, tmp_path, capsys, "--set", "estimate.dead_time_s=400e-9")

    assert figures["same_digest"]
    assert "kappa" in changed(figures)
    assert not changed(figures) & {"visits", "live_s", "visits_repeated", "stands_left_out"}


def test_another_quality_rule_changes_flags_and_no_count(source, tmp_path, capsys):
    _, figures = replay(
        source, tmp_path, capsys, "--set", "quality.gate_time=1e-12", "--set", "quality.clock_step_s=10"
    )

    flags = open_visits(source)["quality"].values ^ open_visits(figures["run"])["quality"].values
    assert figures["same_counts"] and not figures["same_digest"]
    assert set(flags.tolist()) == {0, 128}  # the step of the clock is none by the new rule


def test_changed_thresholds_change_the_warnings_and_nothing_else(source, tmp_path, capsys):
    _, figures = replay(
        source, tmp_path, capsys, "--set", "warn.level_change=1e-4", "--set", "warn.load=1e-9"
    )

    assert figures["same_digest"] and figures["same_times"]
    assert changed(figures) == {"warnings"}
    (row,) = (row for row in figures["differences"] if row["figure"] == "warnings")
    assert "load" in row["new"] and "load" not in row["old"]


def test_a_fault_laid_over_a_replay_costs_time_and_no_count(source, tmp_path, capsys):
    script = tmp_path / "over.toml"
    script.write_text('[[fault]]\ndevice = "counter"\nkind = "drop"\nat_s = 300\nseconds = 30\n')

    _, figures = replay(source, tmp_path, capsys, "--faults", str(script))

    assert figures["same_counts"] and not figures["same_times"]
    assert len(events(Path(figures["run"]), "fault")) > len(events(source, "fault"))


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ("itinerary.laps=10", "the archive cannot answer this: what another order, or another dwell, would"),
        ("positions.number=5", "nothing was counted at any other position"),
        ("expect.single_slit_rate_hz=1.0", "would have other visits. Rehearse it instead"),
        ("estimate.counting='power'", "the archive holds counts"),
        ("estimate.monitor_channel=1", "monitor_channel"),
        ("quality.dispersion_p=1e-4", "no gate was divided"),
        ("quality.limits.cellar={above=1.0}", "the archive holds no cellar"),
        ("estimate.dead_time=1e-9", "dead_time"),
        ("estimate.dead_time_s", "write KEY=VALUE"),
    ],
)
def test_a_question_that_the_archive_cannot_answer_is_refused_in_words(
    source, tmp_path, capsys, change, words
):
    status, figures = replay(source, tmp_path / "lab", capsys, "--set", change)

    assert status == 2
    assert words in " ".join(figures["problems"])
    assert not (tmp_path / "lab").exists()


def test_a_damaged_or_newer_archive_is_a_sentence_and_nothing_is_written(source, tmp_path, capsys):
    damaged, newer = tmp_path / "damaged", tmp_path / "newer"
    for copy in (damaged, newer):
        shutil.copytree(source, copy)
    (damaged / "run.zarr" / "values" / "c" / "0" / "0").unlink()
    root = newer / "run.zarr" / "zarr.json"
    root.write_text(root.read_text().replace('"format": 1,', '"format": 2,'))

    for folder, words in ((damaged, "values of rows 0 to"), (newer, "has format 2")):
        status, figures = replay(folder, tmp_path / "lab", capsys)
        assert status == 4
        assert words in figures["problems"][0]
    assert not (tmp_path / "lab").exists()


def test_a_run_that_was_broken_off_is_replayed_as_far_as_it_came(source, tmp_path, capsys):
    folder = tmp_path / "lab" / "runs" / "20261201T170000Z-broken"
    _cut_short(source, folder, rows=101)

    status, figures = replay(folder, tmp_path / "again", capsys)

    assert status == 0
    assert figures["rows"] == 101 and figures["same_digest"]


def test_a_run_that_went_on_after_a_break_is_replayed_with_the_stand_that_was_begun_twice(
    source, tmp_path, capsys
):
    folder = tmp_path / "lab" / "runs" / "20261201T170000Z-broken"
    _cut_short(source, folder, rows=101)
    assert main(["rehearse", "--resume", str(folder), "--link", "direct"]) == 0

    status, figures = replay(folder, tmp_path / "again", capsys)

    assert 1 in open_visits(folder)["reason"].values
    assert status == 0
    assert figures["same_digest"] and figures["same_times"]
    assert open_visits(figures["run"])["reason"].equals(open_visits(folder)["reason"])


@pytest.mark.parametrize("file", ["horn.toml", "beam.toml"])
def test_power_readings_and_detected_particles_are_replayed_too_with_the_links_they_lost(
    tmp_path, capsys, file
):
    for part in ("rigs", "dialects"):
        shutil.copytree(CONFIGS / part, tmp_path / part)
    text = re.sub(r"(?m)^laps = \d+", "laps = 2", (CONFIGS / file).read_text())
    (tmp_path / file).write_text(re.sub(r"(?m)^number = \d+", "number = 3", text))
    (tmp_path / "faults.toml").write_text(
        '[[fault]]\ndevice = "counter"\nkind = "drop"\nat_s = 40\nseconds = 3\n'
    )
    words = ["--link", "direct", "--faults", str(tmp_path / "faults.toml"), "--into", str(tmp_path / "lab")]
    assert main(["rehearse", str(tmp_path / file), *words]) == 0
    (night,) = (tmp_path / "lab" / "runs").iterdir()

    status, figures = replay(night, tmp_path / "again", capsys)

    assert status == 0
    assert figures["same_digest"] and figures["same_times"]
    assert len(events(Path(figures["run"]), "fault")) == len(events(night, "fault")) > 0


def _cut_short(source: Path, folder: Path, rows: int) -> None:
    """Write the first rows of a run as a run of their own that is not finished."""
    from daq.itinerary.archived import archived
    from daq.service.tape import tape_of
    from daq.storage.reader import open_itinerary
    from daq.storage.run import create_run

    tape = tape_of(source)
    texts = {name: (source / name).read_bytes() for name in ("description.toml", "rig.toml")}
    meta = {key: value for key, value in tape.meta.items() if key not in ("finished", "results", "digest")}
    plan = archived(open_itinerary(source))
    with create_run(folder, texts=texts, itinerary=plan, meta=meta) as archive:
        for reading in tape.readings[:rows]:
            archive.commit(reading)


@pytest.mark.long
@pytest.mark.parametrize("link", ["direct", "tcp"])
def test_ten_hours_with_thirty_faults_are_replayed_row_by_row(tmp_path, capsys, link):
    script = str(CONFIGS / "faults" / "rough-night.toml")
    words = ["--hours", "10", "--seed", "7", "--link", "direct", "--faults", script]
    assert main(["rehearse", *words, "--into", str(tmp_path)]) == 0
    (night,) = (tmp_path / "runs").iterdir()

    status, figures = replay(night, tmp_path / "again", capsys, "--link", link)

    assert len(events(night, "fault")) >= 30
    assert status == 0
    assert figures["same_digest"] and figures["same_times"]
    assert changed(figures) == set()
