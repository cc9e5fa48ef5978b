"""What leaves the lab: a bag that validates, a zip that Zarr opens, tables that any program reads."""

from __future__ import annotations

import csv
import json
import subprocess
import sys
from functools import partial
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
import zarr

from daq.errors import StorageError
from daq.estimate.dataset import estimate_run
from daq.storage.export import write_csv
from daq.storage.pack import bag_problems, pack_bag, pack_zip
from daq.storage.reader import open_itinerary, open_visits
from daq.storage.verify import verify
from tests.daq.storage.example import listed, started

REPORT = "kappa = 0\n"
SCRIPT = Path(__file__).with_name("kappa_by_hand.py")


@pytest.fixture(scope="module")
def bag(triple: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    target = tmp_path_factory.mktemp("bags") / "triple-bag"
    pack_bag(triple, target, REPORT)
    return target


def test_a_bag_validates_and_holds_the_run_as_it_is(bag: Path, triple: Path) -> None:
    assert bag_problems(bag) == []
    assert verify(bag / "data" / triple.name).ok
    names = {path.name for path in bag.iterdir()} | {path.name for path in (bag / "data").iterdir()}
    assert {"bagit.txt", "bag-info.txt", "manifest-sha512.txt", "tagmanifest-sha512.txt", "data"} <= names
    assert {"README.txt", "report.txt", "visits.csv", "settings.json", "datacite.json", triple.name} <= names


def test_one_flipped_byte_in_a_bag_is_named(triple: Path, tmp_path: Path) -> None:
    pack_bag(triple, tmp_path / "bag", REPORT)
    chunk = tmp_path / "bag" / "data" / triple.name / "run.zarr" / "values" / "c" / "0" / "0"
    data = bytearray(chunk.read_bytes())
    data[20] ^= 1
    chunk.write_bytes(data)

    problems = bag_problems(tmp_path / "bag")

    assert len(problems) == 1
    assert "run.zarr/values/c/0/0" in problems[0]


def test_a_folder_that_is_no_bag_is_named(tmp_path: Path) -> None:
    with pytest.raises(StorageError, match="this is no bag"):
        bag_problems(tmp_path)


def test_the_citation_record_has_the_six_required_properties(bag: Path) -> None:
    record = json.loads((bag / "data" / "datacite.json").read_text())

    assert record["identifiers"][0]["identifier"]
    assert record["creators"] == [{"name": ":unkn"}]
    assert record["titles"] == [{"title": "Lantern bench, three slits, a short night"}]
    assert record["publisher"] == {"name": "Lantern bench"}
    assert record["publicationYear"] == "2026"
    assert record["types"]["resourceTypeGeneral"] == "Dataset"


def test_a_script_of_forty_lines_gets_kappa_and_its_error_from_the_table_alone(
    bag: Path, triple: Path
) -> None:
    estimate = estimate_run(open_visits(triple))
    assert len(SCRIPT.read_text().splitlines()) <= 40
    assert (estimate.pairs, estimate.estimator) == (3, "plain contrast")

    done = subprocess.run(
        [sys.executable, "-I", str(SCRIPT), str(bag / "data")], capture_output=True, check=True, text=True
    )

    kappa, kappa_se = json.loads(done.stdout)
    assert estimate.kappa is not None
    assert estimate.kappa_se is not None
    assert abs(kappa - estimate.kappa) < 1e-12
    assert abs(kappa_se - estimate.kappa_se) < 1e-9


def test_a_run_that_is_not_finished_is_not_packed(tmp_path: Path) -> None:
    started(tmp_path / "run").close()

    for pack in (partial(pack_bag, report=REPORT), pack_zip):
        with pytest.raises(StorageError, match="the run is not finished"):
            pack(tmp_path / "run", tmp_path / "target")


def test_a_target_that_exists_is_kept(triple: Path, tmp_path: Path) -> None:
    (tmp_path / "target").write_text("mine")

    for pack in (partial(pack_bag, report=REPORT), pack_zip):
        with pytest.raises(StorageError, match="it exists already"):
            pack(triple, tmp_path / "target")

    assert (tmp_path / "target").read_text() == "mine"


def test_zarr_opens_the_zip_and_finds_every_value(triple: Path, tmp_path: Path) -> None:
    pack_zip(triple, tmp_path / "run.zip")

    with zarr.storage.ZipStore(tmp_path / "run.zip", mode="r") as store:
        zipped = xr.open_zarr(store, chunks=None).load()
        itinerary = xr.open_zarr(store, group="itinerary", chunks=None).load()

    ours = open_visits(triple)
    xr.testing.assert_identical(zipped[list(ours)], ours)
    xr.testing.assert_equal(itinerary, open_itinerary(triple)[list(itinerary)])


def test_the_table_reads_back_value_by_value(triple: Path, tmp_path: Path) -> None:
    write_csv(triple, tmp_path / "visits.csv")
    visits = open_visits(triple)

    with (tmp_path / "visits.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))

    assert len(rows) == visits.sizes["row"]
    for name in ("visit", "attempt", "opening", "gate_open_ns", "quality", "stand", "use"):
        np.testing.assert_array_equal([int(row[name] or -1) for row in rows], visits[name].values)
    for name in ("position_mm", "live_s"):
        assert [float(row[name]) for row in rows] == visits[name].values.tolist()
    assert [int(row["values_0"]) for row in rows] == visits["values"].values[:, 0].tolist()
    assert [row["opening_name"] for row in rows[:8]] == ["none", "A", "B", "AB", "C", "AC", "BC", "ABC"]
    assert [row["visit"] for row in rows if row["quality"] == "2048"] == [""]


def test_channels_of_the_table_are_in_order_and_events_are_left_out(tmp_path: Path) -> None:
    with started(tmp_path / "run", tick_s=1e-9) as archive:
        archive.commit(listed(2))
        archive.finish({})
    write_csv(tmp_path / "run", tmp_path / "visits.csv")

    with (tmp_path / "visits.csv").open(encoding="utf-8", newline="") as file:
        row = next(csv.DictReader(file))

    first, second = open_visits(tmp_path / "run")["values"].values[0].tolist()
    assert (int(row["values_0"]), int(row["values_1"])) == (first, second)
    assert "event_gap" not in row
    assert row["event_count"] == "100"


def test_netcdf_without_its_packages_says_what_to_install(triple: Path, tmp_path: Path) -> None:
    code = (
        "import sys; from pathlib import Path; sys.modules['h5py'] = None\n"  # as where it is not installed
        "from daq.storage.export import write_netcdf\n"
        "write_netcdf(Path(sys.argv[1]), Path(sys.argv[2]))"
    )

    words = [sys.executable, "-c", code, str(triple), str(tmp_path / "run.nc")]
    said = subprocess.run(words, capture_output=True, text=True, check=False).stderr

    assert "pip install h5netcdf h5py" in said.splitlines()[-1]
    assert list(tmp_path.iterdir()) == []


def test_an_export_that_fails_leaves_nothing_behind(triple: Path, tmp_path: Path) -> None:
    with pytest.raises(StorageError, match="none"):
        write_csv(triple, tmp_path / "none" / "visits.csv")

    assert list(tmp_path.iterdir()) == []
