"""A run's archive alone says what was measured, with what, by which program, and where the checksums are."""

from __future__ import annotations

import hashlib
import json
import shutil
import subprocess
from pathlib import Path
from typing import Any

import pytest

from daq.openings import names
from daq.service.equip import Wanted
from daq.service.load import Wishes, config_dir, load
from daq.service.software import commit, software
from daq.service.start import begin
from daq.storage.layout import columns
from daq.storage.log import read_log
from daq.storage.reader import open_itinerary, open_visits, read_meta

# What a record needs: common practice of long unattended measurements, no source. Group -> fields.
REQUIRED = {
    "identity": ("id", "run", "name", "title", "purpose", "kind", "goal_se", "normalisation", "format"),
    "time": ("started_utc", "zone", "clock"),
    "set-up": (
        *("set_up.rig", "set_up.simulated", "set_up.chip", "set_up.wavelength_m", "set_up.distance_m"),
        *("set_up.slits", "set_up.openings", "set_up.axes"),
    ),
    "devices": ("devices",),
    "software": (
        *("software.name", "software.version", "software.python", "software.system", "software.machine"),
        *("software.packages", "software.command", "software.commit", "software.changed"),
    ),
    "description": ("description", "texts_sha256", "quality", "seed", "bench_seed", "wishes", "plan_notes"),
    "itinerary": ("visits_planned", "visits_per_stand", "planned_pairs", "order", "weights", "signs"),
    "estimate": ("dead_time_s", "dead_time_kind", "dead_time_u_s", "counting", "blinding"),
    "integrity": ("digest", "gate_digest"),
    "calibrations": ("bench_records", "armed.by", "armed.utc", "armed.without"),
    "notes": ("notes",),
}
EMPTY_ALLOWED = {
    "bench_records",
    "plan_notes",
    "notes",
    "software.command",
    "software.commit",
    "software.changed",
    "wishes",
}

ARMED = {"by": "night watch", "utc": "2026-12-01T16:00:00Z", "without": {"pilot": "watched by hand"}}


@pytest.fixture(scope="module")
def run(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Return a run of two laps at three positions, finished."""
    folder = tmp_path_factory.mktemp("described")
    shutil.copytree(config_dir() / "rigs", folder / "rigs")
    text = (config_dir() / "lantern.toml").read_text().replace("number = 41", "number = 3")
    (folder / "short.toml").write_text(text.replace("laps = 38", "laps = 2"))
    done, _ = begin(
        load(folder / "short.toml", Wishes(seed=7)), folder / "lab", Wanted("direct", armed=ARMED)
    )
    return done


@pytest.fixture(scope="module")
def record(run: Path) -> dict[str, Any]:
    return read_meta(run)


def looked_up(record: dict[str, Any], path: str) -> Any:
    for key in path.split("."):
        record = record[key]
    return record


@pytest.mark.parametrize(
    ("group", "path"), [(group, path) for group, paths in REQUIRED.items() for path in paths]
)
def test_a_record_holds_every_field_that_it_needs(record: dict[str, Any], group: str, path: str) -> None:
    found = looked_up(record, path)

    assert found not in (None, "", {}, []) or path in EMPTY_ALLOWED, f"{group}: {path}"


def test_every_device_says_what_it_is_there_for_and_what_it_answered(record: dict[str, Any]) -> None:
    devices = record["devices"]

    assert {name: one["role"] for name, one in devices.items()} == {
        "stages": "moves mask, detector",
        "counter": "counter",
        "room": "sensor",
    }
    for one in devices.values():
        assert one["address"] and one["driver"] and one["identity"]


def test_the_copies_are_what_was_read_and_their_checksums_stand_in_the_record(
    run: Path, record: dict[str, Any]
) -> None:
    for name, digest in record["texts_sha256"].items():
        assert hashlib.sha256((run / name).read_bytes()).hexdigest() == digest
    assert {"description.toml", "rig.toml"} <= record["texts_sha256"].keys()


def test_the_description_stands_there_with_its_defaults_filled_in(record: dict[str, Any]) -> None:
    described = record["description"]

    assert described["itinerary"]["fly_back"] is False  # written nowhere in the file
    assert described["quality"] == record["quality"]


def test_planned_and_performed_visits_stand_side_by_side(run: Path, record: dict[str, Any]) -> None:
    visits, plan = open_visits(run), open_itinerary(run)

    assert plan.sizes["planned"] == record["visits_planned"] == 2 * 3 * len(names(3))
    assert (plan["opening"].values[visits["visit"].values] == visits["opening"].values).all()
    assert {"live_s", "gate_open_ns", "utc_ns", "values", "quality", "reason", "attempt"} <= {
        column.name for column in columns(record)
    }
    assert {"encoder_mask_open_mm", "encoder_detector_close_mm", "sensor_room_temperature"} <= set(visits)


def test_the_log_says_when_it_began_and_how_it_ended(run: Path) -> None:
    events = [entry["event"] for entry in read_log(run)]

    assert events[0] == "run begins"
    assert events[-1] == "ended"


def test_the_record_stands_in_a_second_place(run: Path, record: dict[str, Any]) -> None:
    second = json.loads((run / "record.json").read_bytes())

    assert second == {name: record[name] for name in second}
    assert record.keys() - second.keys() == {
        "finished",
        "ended",
        "ended_utc",
        "stop",
        "results",
        "digest",
        "gate_digest",
    }


def test_nothing_of_the_environment_is_kept_but_what_is_named() -> None:
    kept = software({"TZ": "UTC", "MAIL_PASSWORD": "secret", "LANG": "C"})["environment"]

    assert kept == {"TZ": "UTC", "LANG": "C"}


def test_the_commit_says_whether_files_differ_from_it(tmp_path: Path) -> None:
    assert commit(tmp_path) == {"commit": None, "changed": None}
    (tmp_path / "a.py").write_text("1")
    for words in ("init -q", "add a.py", "-c user.name=t -c user.email=t@lantern.example commit -qm first"):
        subprocess.run(["git", "-C", str(tmp_path), *words.split()], check=True)
    head = subprocess.run(
        ["git", "-C", str(tmp_path), "rev-parse", "HEAD"], capture_output=True, text=True, check=True
    ).stdout.strip()

    assert commit(tmp_path) == {"commit": head, "changed": False}
    (tmp_path / "a.py").write_text("2")
    assert commit(tmp_path) == {"commit": head, "changed": True}
