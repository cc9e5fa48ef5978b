"""Bench tasks carried out on the simulated bench: raw visits, outcome, picture; what stops them."""

from __future__ import annotations

import json
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path

import pytest

from daq import open_visits
from daq.errors import DaqError
from daq.service.bench_records import newest, why_not
from daq.service.bench_task import Person, carry_out
from daq.service.load import Loaded, config_dir, load
from daq.storage.verify import verify
from daq.tasks import Outcome, Task, task_of
from tests.contracts.rigs import words
from tests.examples import lantern_rig


@pytest.fixture
def loaded() -> Loaded:
    return load(config_dir() / "lantern.toml")


def short(task: Task, visits: int) -> Task:
    """Return a task that asks for its first visits only."""
    return replace(task, asks=lambda setting, taken: task.asks(setting, taken)[:visits])


def test_a_task_leaves_its_visits_in_the_format_of_a_run_and_its_outcome_beside_them(
    loaded: Loaded, tmp_path: Path
) -> None:
    record = carry_out(short(task_of("dark"), 10), loaded, tmp_path, Person("somebody"))
    folder = tmp_path / "bench" / record["record"]

    assert open_visits(folder)["values"].values.sum() > 0
    assert verify(folder).ok
    assert (folder / "picture.png").read_bytes()[1:4] == b"PNG"
    kept = json.loads((folder / "outcome.json").read_text())
    assert kept["values"] == record["values"]
    assert (kept["verdict"], kept["by"], kept["visits"]) == ("pass", "somebody", 10)


def test_the_truth_of_the_bench_is_found(loaded: Loaded, tmp_path: Path) -> None:
    dark = carry_out(task_of("dark"), loaded, tmp_path, Person())
    dead = carry_out(task_of("deadtime"), loaded, tmp_path, Person())

    assert (
        abs(dark["values"]["closed_hz"] - 800.0) < 4 * dark["se"]["closed_hz"] + 0.01 * 800
    )  # the source walks
    assert abs(dead["values"]["dead_time_s"] - 40e-9) < 4 * dead["se"]["dead_time_s"]
    assert dead["at_utc"] > dark["at_utc"]  # the bench goes on where it was left


def test_with_a_shutter_dark_and_light_are_told_apart(loaded: Loaded, tmp_path: Path) -> None:
    shuttered = replace(loaded, rig=words())

    record = carry_out(short(task_of("dark"), 8), shuttered, tmp_path, Person())

    assert abs(record["values"]["dark_hz"] - 50.0) < 4 * record["se"]["dark_hz"]
    assert record["values"]["leak_hz"] == pytest.approx(750.0, rel=0.05)


def test_a_task_that_the_rig_cannot_do_opens_nothing(loaded: Loaded, tmp_path: Path) -> None:
    power = loaded.measurement.estimate.model_copy(update={"counting": "power"})
    reads_power = replace(loaded, measurement=loaded.measurement.model_copy(update={"estimate": power}))

    with pytest.raises(DaqError, match="task dark: it needs counts"):
        carry_out(task_of("dark"), reads_power, tmp_path, Person())

    assert not list(tmp_path.glob("bench/dark/*"))


def test_a_failed_fit_is_a_record_with_a_sentence_and_no_validity(loaded: Loaded, tmp_path: Path) -> None:
    def refuse(*_: object) -> Outcome:
        raise DaqError("the fit does not converge", remedy="Look at the picture")

    record = carry_out(replace(short(task_of("dark"), 2), fit=refuse), loaded, tmp_path, Person())

    assert (record["verdict"], record["valid_until"], record["ok"]) == ("fail", None, False)
    assert "does not converge" in record["sentence"]
    assert newest(tmp_path, "dark", loaded.rig)[0] is None


def test_the_newest_valid_record_is_taken(loaded: Loaded, tmp_path: Path) -> None:
    dark = short(task_of("dark"), 2)
    carry_out(dark, loaded, tmp_path, Person())
    second = carry_out(dark, loaded, tmp_path, Person())

    found, why = newest(tmp_path, "dark", loaded.rig)

    assert (found or {})["record"] == second["record"]
    assert why == ""


def test_a_record_of_another_chip_is_refused_with_a_sentence(loaded: Loaded, tmp_path: Path) -> None:
    carry_out(short(task_of("dark"), 2), loaded, tmp_path, Person())
    table = lantern_rig().mask.model_copy(update={"chip": "lantern-3-02"})
    changed = loaded.rig.model_copy(update={"mask": table})

    found, why = newest(tmp_path, "dark", changed)

    assert found is None
    assert "another chip (lantern-3-01, now lantern-3-02)" in why


def test_a_record_of_a_real_rig_grows_old(loaded: Loaded, tmp_path: Path) -> None:
    record = carry_out(short(task_of("dark"), 2), loaded, tmp_path, Person())
    real = loaded.rig.model_copy(update={"bench": None})
    until = datetime.fromisoformat(record["valid_until"]).astimezone(UTC)

    assert why_not(record, real, until - timedelta(minutes=1)) == ""
    assert "it held until" in why_not(record, real, until + timedelta(minutes=1))
