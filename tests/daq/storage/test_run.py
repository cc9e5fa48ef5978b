from __future__ import annotations

from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest
import xarray as xr
import zarr

from daq.records import Quality, Reading
from daq.storage.layout import columns
from daq.storage.reader import open_itinerary, open_visits, read_meta
from daq.storage.run import Archive, create_run, open_run
from daq.storage.snapshot import JOURNAL
from tests.daq.storage.example import META, TEXTS, expected, planned_visits, reading, started


def commit_all(archive: Archive, readings: Sequence[Reading]) -> None:
    for number, one in enumerate(readings, start=archive.rows):
        assert archive.commit(one) == number


def assert_equal_to(readings: Sequence[Reading], opened: Any) -> None:
    for name, values in expected(readings).items():
        np.testing.assert_array_equal(np.asarray(opened[name]), values, err_msg=name)


def test_every_value_comes_back_from_a_running_archive_sealed_or_not(tmp_path: Path) -> None:
    readings = [reading(visit) for visit in range(40)]

    with started(tmp_path / "run", chunk=16) as archive:
        commit_all(archive, readings)
        dataset = open_visits(tmp_path / "run")

    assert_equal_to(readings, dataset)


def test_every_value_comes_back_through_plain_zarr(tmp_path: Path) -> None:
    readings = [reading(visit) for visit in range(40)]
    with started(tmp_path / "run", chunk=16) as archive:
        commit_all(archive, readings)
        archive.finish({"kappa": 0.001})

    group = zarr.open_group(tmp_path / "run" / "run.zarr", mode="r")

    assert_equal_to(readings, {name: group[name][:] for name, _ in group.arrays()})  # type: ignore[index]
    assert group.attrs["kappa"] == 0.001


def test_every_value_comes_back_through_plain_xarray_in_the_declared_type(tmp_path: Path) -> None:
    readings = [reading(visit) for visit in range(40)]
    with started(tmp_path / "run", chunk=16) as archive:
        commit_all(archive, readings)
        archive.finish({})

    dataset = xr.open_zarr(tmp_path / "run" / "run.zarr", chunks=None)

    assert_equal_to(readings, dataset)
    for column in columns(META):
        assert dataset[column.name].dtype == column.kind
        assert dataset[column.name].dims == column.dims


def test_a_finished_run_reads_the_same_through_us_and_through_xarray_with_units_on_everything(
    tmp_path: Path,
) -> None:
    with started(tmp_path / "run", chunk=16) as archive:
        commit_all(archive, [reading(visit) for visit in range(40)])
        archive.finish({})

    ours, plain = open_visits(tmp_path / "run"), xr.open_zarr(tmp_path / "run" / "run.zarr", chunks=None)

    assert set(ours) == set(plain)
    xr.testing.assert_identical(ours, plain[list(ours)])
    itinerary = xr.open_zarr(tmp_path / "run" / "run.zarr", group="itinerary", chunks=None)
    for array in (*plain.values(), *itinerary.values()):
        assert array.attrs["units"]
        assert array.attrs["long_name"]


def test_a_finished_folder_holds_the_copies_and_the_zarr_group_alone(tmp_path: Path) -> None:
    with started(tmp_path / "run") as archive:
        archive.commit(reading(0))
        archive.finish({})

    names = sorted(path.name for path in (tmp_path / "run").iterdir())

    assert names == ["description.toml", "dialects", "record.json", "run.zarr", "sha256.txt"]
    assert not list((tmp_path / "run").rglob("*.partial"))
    for name, text in TEXTS.items():
        assert (tmp_path / "run" / name).read_bytes() == text


def test_the_planned_itinerary_comes_back(tmp_path: Path) -> None:
    plan = planned_visits(4)
    started(tmp_path / "run").close()

    dataset = open_itinerary(tmp_path / "run")

    for name in (
        "opening",
        "position_mm",
        "start_s",
        "dwell_s",
        "stand",
        "lap",
        "pair",
        "positions_mm",
        "weights",
    ):
        np.testing.assert_array_equal(dataset[name], getattr(plan, name), err_msg=name)
    np.testing.assert_array_equal(dataset["forward"].values == 1, plan.forward)
    np.testing.assert_array_equal(dataset["sign_AB"], plan.signs["AB"])


def test_stand_lap_pair_and_coin_follow_from_the_visit_number_and_are_missing_for_unplanned_ones(
    tmp_path: Path,
) -> None:
    plan = planned_visits(4)
    dark = replace(reading(0), visit=-1, quality=Quality.DARK, reason=4)

    with started(tmp_path / "run") as archive:
        commit_all(archive, [reading(30), dark])
        dataset = open_visits(tmp_path / "run")

    assert dataset["stand"].values.tolist() == [plan.stand[30], -1]
    assert dataset["lap"].values.tolist() == [plan.lap[30], -1]
    assert dataset["pair"].values.tolist() == [plan.pair[30], -1]
    assert dataset["forward"].values.tolist() == [int(plan.forward[30]), -1]


def test_a_failed_attempt_stays_and_only_the_repeat_is_used(tmp_path: Path) -> None:
    first = [reading(visit) for visit in range(4)]
    first[2] = replace(first[2], quality=Quality.MOVED)

    with started(tmp_path / "run") as archive:
        commit_all(archive, [*first, *(reading(visit, attempt=2) for visit in range(4))])
        tries, dataset = archive.stands_done(), open_visits(tmp_path / "run")

    assert tries == {0: 2}
    assert dataset["attempt"].values.tolist() == [1] * 4 + [2] * 4
    assert dataset["use"].values.tolist() == [0] * 4 + [1] * 4


def test_a_run_is_gone_on_with_where_it_was_left(tmp_path: Path) -> None:
    readings = [reading(visit) for visit in range(40)]
    with started(tmp_path / "run", chunk=16) as archive:
        commit_all(archive, readings[:21])

    with open_run(tmp_path / "run") as archive:
        assert archive.rows == 21
        assert archive.stands_done() == dict.fromkeys(range(6), 1)
        commit_all(archive, readings[21:])
        archive.finish({})

    assert_equal_to(readings, open_visits(tmp_path / "run"))


def test_a_run_whose_finish_was_broken_off_can_still_grow(tmp_path: Path) -> None:
    readings = [reading(visit) for visit in range(40)]
    with started(tmp_path / "run", chunk=16) as archive:
        commit_all(archive, readings[:21])
        archive.write_rest({"finished": True})  # what finish does first; then the program dies

    assert "finished" not in read_meta(tmp_path / "run")
    with open_run(tmp_path / "run") as archive:
        commit_all(archive, readings[21:])
        archive.finish({})

    plain = xr.open_zarr(tmp_path / "run" / "run.zarr", chunks=None)
    assert_equal_to(readings, plain)


def test_numbers_that_sqlite_would_bend_come_back_bit_by_bit(tmp_path: Path) -> None:
    odd = replace(
        reading(0),
        position_mm=-0.0,
        live_s=float(np.nextafter(2.0, 3.0)),
        gate_open_ns=2**63 - 1,
        encoder_mm={"mask": (float("nan"), 5e-324)},
        values=(np.float64(2**53 + 2), np.int64(2**62)),  # type: ignore[arg-type]
    )

    with started(tmp_path / "run") as archive:
        archive.commit(odd)
        dataset = open_visits(tmp_path / "run")

    assert np.signbit(dataset["position_mm"].values[0])
    assert dataset["live_s"].values[0] == odd.live_s
    assert dataset["gate_open_ns"].values[0] == 2**63 - 1
    assert np.isnan(dataset["encoder_mask_open_mm"].values[0])
    assert dataset["encoder_mask_close_mm"].values[0] == 5e-324
    assert dataset["values"].values[0].tolist() == [2**53 + 2, 2**62]


def test_a_power_meter_is_kept_as_real_numbers_with_variances(tmp_path: Path) -> None:
    meta = {**META, "counting": "power", "values_unit": "nW"}
    power = replace(reading(0), values=(1.25, -0.5), values_var=(1e-6, 2e-6))

    with create_run(tmp_path / "run", texts={}, itinerary=planned_visits(), meta=meta) as archive:
        archive.commit(power)
        archive.finish({})

    dataset = open_visits(tmp_path / "run")
    assert dataset["values"].values.tolist() == [[1.25, -0.5]]
    assert dataset["values_var"].values.tolist() == [[1e-6, 2e-6]]
    assert dataset["values"].attrs["units"] == "nW"


def test_a_run_without_a_visit_can_be_finished_and_read(tmp_path: Path) -> None:
    with started(tmp_path / "run") as archive:
        archive.finish({})

    assert open_visits(tmp_path / "run").sizes["row"] == 0


def test_the_journal_synchronises_fully_and_the_distribution_s_secure_delete_is_off(tmp_path: Path) -> None:
    with started(tmp_path / "run") as archive:
        settings = {
            name: archive.journal.setting(name) for name in ("synchronous", "secure_delete", "page_size")
        }

    assert settings == {"synchronous": 2, "secure_delete": 0, "page_size": 4096}
    assert (tmp_path / "run" / JOURNAL).read_bytes()[18:20] == b"\x02\x02"  # header: write-ahead log


def test_the_meta_data_say_what_the_run_is(tmp_path: Path) -> None:
    started(tmp_path / "run").close()

    meta = read_meta(tmp_path / "run")

    assert meta["format"] == 1
    assert meta["positions_mm"] == planned_visits().positions_mm.tolist()
    assert meta["texts_sha256"].keys() == TEXTS.keys()


@pytest.mark.parametrize("rows", [0, 15, 16, 17, 32])
def test_lengths_around_a_chunk_are_finished_whole(tmp_path: Path, rows: int) -> None:
    readings = [reading(visit) for visit in range(rows)]

    with started(tmp_path / "run", chunk=16) as archive:
        commit_all(archive, readings)
        archive.finish({})

    dataset = open_visits(tmp_path / "run")
    assert dataset.sizes["row"] == rows
    assert_equal_to(readings, dataset)


def test_seals_asked_for_at_once_are_done_one_after_the_other(tmp_path: Path) -> None:
    readings = [reading(visit) for visit in range(48)]
    with started(tmp_path / "run", chunk=8) as archive, ThreadPoolExecutor(4) as pool:
        commit_all(archive, readings)
        for seal in [pool.submit(archive.seal_next) for _ in range(12)]:
            seal.result()
        assert archive.sealed == 48
        assert_equal_to(readings, open_visits(tmp_path / "run"))


def test_a_row_whose_number_was_not_noted_is_found_again(tmp_path: Path) -> None:
    with started(tmp_path / "run", chunk=64) as archive:  # too few visits for the sealer to meddle
        commit_all(archive, [reading(visit) for visit in range(20)])
        archive.journal.rows -= 1  # as Ctrl-C leaves it between SQLite's commit and our note

        archive.journal.recount()

        assert archive.commit(reading(20)) == 20
        archive.journal.forget(archive.rows)
        archive.journal.recount()
        assert archive.rows == 21
