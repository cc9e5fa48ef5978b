"""Bench tasks carried out on the simulated bench: raw visits, outcome, picture; what stops them."""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import replace
from datetime import UTC, datetime, timedelta
from pathlib import Path
from typing import Any

import pytest

from daq import open_visits
from daq.description.measurement import Positions
from daq.errors import DaqError, DeviceError
from daq.service.bench_records import newest, why_not
from daq.service.bench_task import Person, carry_out
from daq.service.load import Loaded, config_dir, load
from daq.storage.verify import verify
from daq.tasks import Outcome, Task, task_of
from tests.contracts.rigs import sliced, words
from tests.examples import lantern_rig, rig_table


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


def test_a_counter_in_list_mode_shows_its_dead_time_by_gaps_and_that_its_gain_sags(
    loaded: Loaded, tmp_path: Path
) -> None:
    listed = lantern_rig(
        devices__counter__driver="list-mode-counter",
        devices__counter__stream="tcp://127.0.0.1:7807",
        bench__single_slit_rate_hz=2e3,
        bench__sag_s=1e-5,
    )

    record = carry_out(task_of("deadtime"), replace(loaded, rig=listed), tmp_path, Person())

    assert abs(record["values"]["by_gaps_s"] - 40e-9) < 4 * record["se"]["by_gaps_s"]
    assert record["values"]["apart_in_se"] > 3
    assert record["verdict"] == "fail"
    assert "Sums and gaps disagree by" in record["sentence"]


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


def failing(task: Task, error: DaqError) -> Task:
    """Return a task whose fit ends with an error."""

    def refuse(*_: object) -> Outcome:
        raise error

    return replace(task, fit=refuse)


def test_what_failed_since_is_not_passed_over_for_what_was_good_before(
    loaded: Loaded, tmp_path: Path
) -> None:
    dark = short(task_of("dark"), 2)
    carry_out(dark, loaded, tmp_path, Person())
    carry_out(failing(dark, DaqError("the fit does not converge")), loaded, tmp_path, Person())

    found, why = newest(tmp_path, "dark", loaded.rig)

    assert found is None
    assert "it failed: the fit does not converge" in why


def test_a_task_that_a_broken_link_ended_leaves_what_was_good_before(loaded: Loaded, tmp_path: Path) -> None:
    dark = short(task_of("dark"), 2)
    good = carry_out(dark, loaded, tmp_path, Person())
    with pytest.raises(DeviceError):
        carry_out(failing(dark, DeviceError("no reply", where="counter")), loaded, tmp_path, Person())

    found, _ = newest(tmp_path, "dark", loaded.rig)

    assert (found or {})["record"] == good["record"]


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


def on_chip(loaded: Loaded, **chip: object) -> Loaded:
    """Return the Lantern bench with another true chip."""
    table = rig_table()
    return replace(loaded, rig=lantern_rig(bench__chip=table["bench"]["chip"] | chip))


def test_register_finds_windows_play_and_scatter_of_the_bench(loaded: Loaded, tmp_path: Path) -> None:
    record = carry_out(task_of("register"), loaded, tmp_path, Person())
    values, se = record["values"], record["se"]

    assert record["verdict"] == "pass"
    own_mm = {"AB": -0.004, "BC": 0.006}
    for name, off_mm in values["off_drawing_mm"].items():
        assert abs(off_mm - 0.012 - own_mm.get(name, 0.0)) < 5 * se["centre_mm"][name]
    assert abs(values["play_mm"] - 0.008) < 5 * se["play_mm"]
    assert values["repeat_mm"] == pytest.approx(0.001, rel=0.3)


@pytest.mark.parametrize(
    ("chip", "said"),
    [
        ({"mirrored": True}, "the chip is in the wrong way"),
        ({"missing": ["B"]}, "7 windows were seen where the drawing has 8. Nothing near B"),
    ],
)
def test_a_wrong_chip_is_a_sentence_and_nothing_is_moved_further(
    loaded: Loaded, tmp_path: Path, chip: dict[str, object], said: str
) -> None:
    record = carry_out(task_of("register"), on_chip(loaded, **chip), tmp_path, Person())

    assert record["verdict"] == "fail"
    assert said in record["sentence"]
    assert {ask["role"] for ask in record["asked"]} == {"coarse"}


def test_a_dark_mask_is_a_sentence(loaded: Loaded, tmp_path: Path) -> None:
    everything = [name for name in loaded.rig.mask.openings if name != "none"]
    dark = on_chip(loaded, missing=everything, offset_mm=100.0)

    record = carry_out(task_of("register"), dark, tmp_path, Person())

    assert "no window was seen on the whole travel" in record["sentence"]


def test_backlash_takes_the_flanks_of_register_and_finds_the_play_of_the_bench(
    loaded: Loaded, tmp_path: Path
) -> None:
    with pytest.raises(
        DaqError,
        match=r"a valid record of register, and there is none \(never done in this lab\): do that first",
    ):
        carry_out(task_of("backlash"), loaded, tmp_path, Person())
    carry_out(task_of("register"), loaded, tmp_path, Person())

    record = carry_out(task_of("backlash"), loaded, tmp_path, Person())

    assert record["verdict"] == "pass"
    assert abs(record["values"]["play_mm"] - 0.008) < 3 * record["se"]["play_mm"] + 0.0003
    assert record["values"]["repeat_mm"] == pytest.approx(0.001, rel=0.4)


def test_a_dry_lap_stops_everywhere_once(loaded: Loaded, tmp_path: Path) -> None:
    few = loaded.measurement.model_copy(update={"positions": Positions(start_mm=-4.0, stop_mm=4.0, number=3)})
    quick = replace(loaded, measurement=few)
    good = carry_out(task_of("dry-lap"), quick, tmp_path, Person())
    assert (good["verdict"], good["values"]["moves"], good["values"]["astray"]) == ("pass", 24, 0)


def test_scale_finds_the_fringes_that_the_geometry_of_the_bench_makes(loaded: Loaded, tmp_path: Path) -> None:
    record = carry_out(task_of("scale"), loaded, tmp_path, Person())

    # 12.8 mm at 1.2 m: places grow faster than sines by half the square of the angle, at most 5.7e-5
    assert record["verdict"] == "pass"
    assert abs(record["values"]["scale"] - 1.0) < 4 * record["se"]["scale"] + 5.7e-5


def test_the_monitor_of_the_bench_sees_nothing_of_its_mask(loaded: Loaded, tmp_path: Path) -> None:
    seen = loaded.measurement.estimate.model_copy(update={"monitor_channel": 1})
    watched = replace(
        loaded, measurement=loaded.measurement.model_copy(update={"estimate": seen}), rig=sliced()
    )

    record = carry_out(task_of("monitor"), watched, tmp_path, Person())

    assert record["values"]["p"] > 1e-3
    # 40 ns at 1e5 a second: the dead time bends it by that much
    assert abs(record["values"]["bend"] + 0.004) < 4 * record["se"]["bend"]
    assert "nothing of the mask" in record["sentence"]


def with_fault(loaded: Loaded, folder: Path, text: str) -> Loaded:
    """Return the Lantern bench on which something goes wrong."""
    (folder / "faults.toml").write_text(f"[[fault]]\n{text}\n")
    return loaded.with_faults(folder / "faults.toml")


def test_a_saturated_detector_is_a_sentence_and_nothing_is_moved_further(
    loaded: Loaded, tmp_path: Path
) -> None:
    spoilt = with_fault(loaded, tmp_path, 'kind = "overflow"\ndevice = "counter"\nat_gate = 4')

    record = carry_out(short(task_of("dark"), 10), spoilt, tmp_path, Person())

    assert record["verdict"] == "fail"
    assert "it is saturated. Take light away" in record["sentence"]
    assert len(open_visits(tmp_path / "bench" / record["record"])["visit"]) == 4


def test_where_visits_break_off_a_person_is_told_to_set_back_what_was_turned(
    loaded: Loaded, tmp_path: Path
) -> None:
    said: list[str] = []
    script = tmp_path / "faults.toml"
    script.write_text('[[fault]]\nkind = "overflow"\ndevice = "counter"\nat_gate = 8\n')

    record = carry_out(task_of("plateau"), loaded.with_faults(script), tmp_path, Person(said=said.append))

    assert "the counter overflowed" in record["sentence"]
    assert record["visits"] == 7
    assert said[-1].startswith("Set back what was turned by hand")


def truly(loaded: Loaded, **bench: object) -> Loaded:
    """Return the Lantern bench with another truth behind it."""
    changes = {f"bench__{name}": value for name, value in bench.items()}
    return replace(loaded, rig=lantern_rig(**changes))


def test_plateau_has_the_dial_turned_and_finds_the_knee_of_the_bench(loaded: Loaded, tmp_path: Path) -> None:
    said: list[str] = []

    record = carry_out(task_of("plateau"), loaded, tmp_path, Person(said=said.append))
    values = record["values"]

    assert record["verdict"] == "pass"
    assert values["begins"] == pytest.approx(870 + 2.326 * 15, abs=12.5)  # 1 % lost; half a step
    assert abs(values["slope"] - 4e-5) < 4 * record["se"]["slope"]
    assert said[1] == "on the simulated bench: Set the detector's bias to 1000 V."
    assert record["asked"][3]["turn"]["value"] == 850.0


def test_a_gain_that_sags_with_the_rate_is_seen_on_the_bench(loaded: Loaded, tmp_path: Path) -> None:
    table = rig_table()["bench"]["detector"] | {"sag": 2.5e-4, "slope": 4e-4}

    record = carry_out(task_of("plateau"), truly(loaded, detector=table), tmp_path, Person())

    bright, dim = (_begins(record["values"], role) for role in ("bright_hz", "dim_hz"))
    assert bright > dim + 25.0  # 3.6e5 a second take 90 V off what is set, 4e4 take 10


def _begins(values: Mapping[str, Any], rates: str) -> float:
    """Return the setting at which half of the top rate is reached on the way up."""
    top = max(values[rates])
    pairs = zip(values["settings"][1:], values[rates][1:], strict=True)
    return float(next(at for at, rate in pairs if rate - values["dark_hz"][0] > top / 2))


def test_crosstalk_finds_what_a_gate_of_the_bench_has_of_the_one_before(
    loaded: Loaded, tmp_path: Path
) -> None:
    record = carry_out(task_of("crosstalk"), truly(loaded, memory=2e-3), tmp_path, Person())

    assert record["verdict"] == "fail"
    assert abs(record["values"]["memory"] - 2e-3) < 4 * record["se"]["memory"]


def test_dark_tells_what_the_light_of_the_room_adds(loaded: Loaded, tmp_path: Path) -> None:
    record = carry_out(task_of("dark"), loaded, tmp_path, Person())

    assert abs(record["values"]["room_hz"] - 4e3) < 4 * record["se"]["room_hz"]
    assert "leave it off at night" in record["sentence"]


def test_a_device_that_falls_silent_ends_the_task_and_what_was_counted_is_kept(
    loaded: Loaded, tmp_path: Path
) -> None:
    silent = with_fault(loaded, tmp_path, 'kind = "drop"\ndevice = "counter"\nat_s = 60\nseconds = 600')

    with pytest.raises(DeviceError):
        carry_out(short(task_of("dark"), 20), silent, tmp_path, Person())

    (folder,) = (tmp_path / "bench" / "dark").iterdir()
    kept = json.loads((folder / "outcome.json").read_text())
    assert kept["verdict"] == "fail"
    assert 0 < len(open_visits(folder)["visit"]) < 20


def test_settle_finds_what_fades_after_a_move_of_the_bench(loaded: Loaded, tmp_path: Path) -> None:
    record = carry_out(
        task_of("settle"), on_chip(loaded, transient=0.03, transient_s=0.15), tmp_path, Person()
    )

    # the first gate opens up to 10 ms after the mask has come to a stand: up to 7 % of it has faded
    values, se = record["values"], record["se"]["size"]
    for stroke in ("long", "short"):
        assert values["seen"][stroke]
        assert 0.93 * 0.03 - 4 * se[stroke] < values["size"][stroke] < 0.03 + 4 * se[stroke]
    assert (values["stroke_mm"], values["apart_p"] > 1e-3) == ({"long": 8.0, "short": 2.0}, True)
