"""Foreign: a table of visits from elsewhere becomes an archive, estimated and replayed like any other."""

from __future__ import annotations

import hashlib
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from daq.description import ForeignTable, Measurement, joint_problems, parse
from daq.description.measurement import Positions
from daq.errors import DescriptionError
from daq.estimate import Judge, estimate_run
from daq.estimate.quality import rules_of
from daq.itinerary import plan_of
from daq.itinerary.known import known_of
from daq.itinerary.tabled import tabled
from daq.records import Reading
from daq.service.cells import FIRST_NS, ForeignVisits, read_visits
from daq.service.files import read_file, read_table
from daq.service.live import stamp
from daq.service.load import load
from daq.service.record import plan_record
from daq.storage.lab import new_run_folder
from daq.storage.reader import open_visits
from daq.storage.run import create_run

TABLE, MAPPING = "table.csv", "table.toml"


def take_in(table: Path, mapping: Path, lab: Path) -> Path:
    """Write a table of visits as a finished run of a lab and return its folder; nothing is written otherwise.

    Raises
    ------
    DescriptionError
        With every problem of mapping and table: columns that are missing, cells that hold no number, openings
        that the rig does not have.
    """
    text = read_file(mapping)
    foreign = parse(read_table(text, mapping), str(mapping), "foreign table")
    loaded = load(mapping.parent / foreign.measurement)
    visits = read_visits(table, foreign, loaded)
    loaded = replace(loaded, measurement=_at(loaded.measurement, visits))
    problems = joint_problems(loaded.measurement, loaded.rig, str(table))
    if problems:
        raise DescriptionError(problems)
    started_ns = round(foreign.started_utc.timestamp() * 1e9)
    plan, number = tabled(
        known_of(loaded.measurement, loaded.rig),
        *(visits.opening, visits.position_mm, visits.lap, visits.open_ns / 1e9, visits.dwell_s),
    )
    texts = {**loaded.texts, TABLE: read_file(table), MAPPING: text}
    folder = new_run_folder(lab, started_ns, loaded.measurement.name)
    meta = plan_record(loaded, plan) | _record(foreign, table, texts[TABLE], started_ns, visits)
    judge = Judge(
        plan_of(plan, loaded.measurement), rules_of(loaded.measurement.quality.model_dump()), plan.rates_hz
    )
    with create_run(folder, texts=texts, itinerary=plan, meta=meta | {"run": folder.name}) as archive:
        for reading in _readings(visits, number, started_ns):
            archive.commit(judge.judge(reading))
        results = estimate_run(open_visits(folder)).to_json()
        plain = {name: value for name, value in results.items() if not isinstance(value, list)}
        archive.finish({"results": plain, "ended": f"taken in from {table.name}"})
    return folder


def _at(measurement: Measurement, visits: ForeignVisits) -> Measurement:
    """Return the measurement at the positions of the table."""
    places = tuple(np.unique(visits.position_mm).tolist())
    return measurement.model_copy(update={"positions": Positions(list_mm=places)})


def _record(
    foreign: ForeignTable, table: Path, text: bytes, started_ns: int, visits: ForeignVisits
) -> dict[str, Any]:
    return {
        "kind": "import",
        "clock": "of the table",
        "devices": {},
        "axes": [],
        "sensors": {},
        "channels": visits.values.shape[1],
        "slices": 0,
        "tolerance_mm": {},
        "targets_mm": {},
        "started_utc": stamp(started_ns),
        "bench_seed": None,
        "truth_kappa": None,
        "taken_in": {
            "file": table.name,
            "sha256": hashlib.sha256(text).hexdigest(),
            "columns": foreign.columns.heads(),
        },
    }


def _readings(visits: ForeignVisits, number: NDArray[np.int64], started_ns: int) -> Iterator[Reading]:
    columns = zip(
        *(column.tolist() for column in (number, visits.attempt, visits.opening, visits.position_mm)),
        *(column.tolist() for column in (visits.dwell_s, visits.open_ns, visits.live_s, visits.values)),
        strict=True,
    )
    for visit, attempt, opening, place, dwell_s, opened, live_s, values in columns:
        yield Reading(
            visit=visit,
            attempt=attempt,
            opening=opening,
            position_mm=place,
            dwell_s=dwell_s,
            gate_open_ns=opened,
            gate_close_ns=opened + round(live_s * 1e9),
            utc_ns=started_ns + opened - FIRST_NS,
            live_s=live_s,
            values=tuple(values),
        )
