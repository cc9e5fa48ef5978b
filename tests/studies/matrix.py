"""The fault matrix: what each kind of fault costs a short run, and which test says what is done about it."""

from __future__ import annotations

import json
import tempfile
from collections.abc import Mapping
from contextlib import suppress
from pathlib import Path
from typing import Any

from daq.errors import DaqError
from daq.service import start
from daq.service.load import NO_WISHES, load
from daq.storage.feed import read_feed
from daq.storage.log import read_log
from daq.storage.reader import open_visits
from tests.examples import CONFIGS
from tests.studies.chaos import LIMIT, with_gauge

AT_S = 400.0
MOVING_AT_S = 400.7  # the mask is on its way then
SMALL = (
    ("number = 41 ", "number = 5 "),
    ("start_mm = -12.8", "start_mm = -2.56"),
    ("stop_mm = 12.8", "stop_mm = 2.56"),
    ("laps = 38", "laps = 8"),
)
_NIGHT, _HOLD, _RUNS = "tests/daq/service/test_night.py", "tests/daq/service/test_holding.py", "tests/runs"
_REPLY = (
    "asked again where that is safe, else the stand again",
    f"{_NIGHT}::test_after_a_fault_the_stand_is_repeated_whole_and_the_run_goes_on",
)
_LINK = (
    "links opened anew with growing waits, then the stand again; 4 h, then park",
    f"{_NIGHT}::test_a_lost_link_is_closed_and_opened_again",
)
_BENCH = (
    "stop, beam out, hold for a person at the bench; 2 h, then park",
    f"{_HOLD}::test_an_axis_with_an_alarm_or_without_its_reference_waits_for_a_person",
)
# kind -> the fault, what is done about it, the test that says so
FAULTS: Mapping[str, tuple[Mapping[str, Any], str, str]] = {
    **{
        kind: ({"kind": kind, "device": "counter", "at_s": AT_S}, *_REPLY)
        for kind in ("silent", "half", "garbage", "double")
    },
    "late by 0.8 s": ({"kind": "late", "device": "counter", "seconds": 0.8, "at_s": AT_S}, *_REPLY),
    "one refusal": (
        {"kind": "nak", "device": "stages", "at_s": AT_S},
        "the state is read, then the stand again; 20 s, then park",
        f"{_NIGHT}::test_a_refusal_is_tried_again_once_and_parks_when_it_stays",
    ),
    "link lost for 30 s": ({"kind": "drop", "device": "counter", "seconds": 30.0, "at_s": AT_S}, *_LINK),
    "link lost for 600 s": ({"kind": "drop", "device": "stages", "seconds": 600.0, "at_s": AT_S}, *_LINK),
    "alarm": ({"kind": "alarm", "device": "stages", "at_s": AT_S}, *_BENCH),
    "stall in a move": (
        {"kind": "stall", "axis": "mask", "at_s": MOVING_AT_S},
        "the stand again, whole",
        f"{_HOLD}::test_a_stand_that_a_rule_refuses_is_measured_again_once",
    ),
    "slip that the encoder sees": (
        {"kind": "slip", "axis": "detector", "size_mm": 0.2, "at_s": AT_S},
        "the stand again; six in a row: hold for the bench",
        f"{_HOLD}::test_an_axis_that_is_astray_in_six_stands_waits_for_a_person",
    ),
    "overflow": (
        {"kind": "overflow", "device": "counter", "at_gate": 100},
        "the stand again, whole",
        f"{_HOLD}::test_a_stand_that_a_rule_refuses_is_measured_again_once",
    ),
    "beam off for 300 s": (
        {"kind": "beam-off", "seconds": 300.0, "at_s": AT_S},
        "after two dark stands: hold, try the next stand after 1, 2, 5 min; 2 h, then park",
        f"{_HOLD}::test_without_light_the_run_holds_tries_the_next_stand_and_goes_on_when_it_is_back",
    ),
    "pressure too high for 300 s": (
        {"kind": "trip", "device": "gauge", "seconds": 300.0, "factor": 1e6, "at_s": AT_S},
        "hold until good for settle_s; 2 h, then park",
        f"{_HOLD}::test_a_sensor_out_of_its_band_holds_until_it_has_been_good_for_long_enough",
    ),
    "clock step of an hour": (
        {"kind": "clock-step", "step_s": 3600.0, "at_s": AT_S},
        "noted; run time does not follow that clock",
        "tests/daq/devices/test_clock_steps.py::test_a_step_changes_no_live_time_no_gate_and_no_count",
    ),
}
# What no fault script can do: by its own tests.
OTHERS: Mapping[str, tuple[str, str]] = {
    "interlock open": (
        "as an alarm; never cleared from afar",
        f"{_HOLD}::test_an_interlock_stops_the_stages_and_is_cleared_at_the_bench_only",
    ),
    "detector overload": (
        "as an alarm; kappa is in doubt",
        f"{_HOLD}::test_an_overloaded_detector_is_shut_off_and_puts_kappa_in_doubt",
    ),
    "disk nearly full": (
        "warned of, held below 1 GB, ended below 0.2 GB",
        f"{_HOLD}::test_a_disk_with_next_to_no_room_ends_the_run_cleanly",
    ),
    "service killed": (
        "gone on with: the interrupted stand again",
        f"{_RUNS}/test_service.py::"
        "test_a_booked_run_is_started_once_though_its_service_is_killed_and_it_ends_by_its_time",
    ),
    "restarted three times in an hour": (
        "ends after the lap",
        f"{_HOLD}::test_a_program_that_was_restarted_three_times_within_the_hour_ends_after_the_lap",
    ),
    "network away": (
        "messages wait in the lab book",
        "tests/daq/service/test_messages.py::test_a_dead_server_loses_nothing",
    ),
    "page killed or left": (
        "the run goes on; a page whose service is gone ends",
        "tests/dashboard/test_main.py::test_the_page_ends_with_whoever_started_it",
    ),
}


def study(nights: int = len(FAULTS)) -> dict[str, Any]:
    """Return what each fault costs; `nights` limits how many are tried."""
    quiet_s, _, _ = _run(None)
    rows: dict[str, Any] = {}
    for kind, (fault, reaction, test) in list(FAULTS.items())[:nights]:
        run_s, ended, repeated = _run(fault)
        rows[kind] = {
            "reaction": reaction,
            "lost_s": run_s - quiet_s,
            "repeated": repeated,
            "ended": ended,
            "test": test,
        }
    for kind, (reaction, test) in OTHERS.items():
        rows[kind] = {"reaction": reaction, "test": test}
    about = "Lantern at 5 positions, 8 laps, the fault at 400 s; time lost against the same run without it"
    return {"about": about, "rows": rows}


def _run(fault: Mapping[str, Any] | None) -> tuple[float, str, int]:
    """Return how long a run with a fault took [s], how it ended, and how many visits were repeated."""
    with tempfile.TemporaryDirectory() as folder:
        lab = Path(folder)
        _describe(lab, fault)
        loaded = load(lab / "night.toml", NO_WISHES).with_faults(lab / "faults.toml")
        with suppress(DaqError):  # the feed says why it ended
            start.begin(loaded, lab, start.Wanted("direct"))
        (run,) = (lab / "runs").iterdir()
        visits = open_visits(run)
        ended = (read_feed(run) or {}).get("ended") or {}
        took_s = max(entry["run_ns"] for entry in read_log(run) if "run_ns" in entry) / 1e9
        return took_s, str(ended.get("reason", "")), int((visits["attempt"].values > 1).sum())


def _describe(lab: Path, fault: Mapping[str, Any] | None) -> None:
    (lab / "dialects").mkdir()
    (lab / "dialects" / "text-gauge.toml").write_bytes(
        (CONFIGS / "dialects" / "text-gauge.toml").read_bytes()
    )
    (lab / "rig.toml").write_text(with_gauge((CONFIGS / "rigs" / "lantern.toml").read_text()))
    text = (CONFIGS / "lantern.toml").read_text()
    for old, new in SMALL:
        assert old in text, old
        text = text.replace(old, new)
    (lab / "night.toml").write_text(text.replace('"rigs/lantern.toml"', '"rig.toml"') + LIMIT)
    lines = ["seed = 1\n"]
    if fault is not None:
        lines += ["[[fault]]\n", *(f"{key} = {json.dumps(value)}\n" for key, value in fault.items())]
    (lab / "faults.toml").write_text("".join(lines))
