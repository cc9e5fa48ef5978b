"""Archived runs estimated anew and taken together, from folders, zips and an object store."""

from __future__ import annotations

import shutil
import zipfile
from collections.abc import Iterable, Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from daq.cli import main
from daq.cli.toml import toml_text
from daq.estimate import estimate_run, plan_of_dataset, pool
from daq.estimate.dataset import rows_of_dataset
from daq.estimate.positions import leftover_by_pair
from daq.estimate.sums import sums_of
from daq.estimate.visits import visits_of
from daq.scale.job import Job
from daq.scale.kept import Kept
from daq.scale.nights import Night
from daq.scale.pool import pool_runs
from daq.scale.study import Block, Outcome, here
from daq.storage.elsewhere import open_finished
from daq.storage.pack import pack_zip
from daq.storage.reader import open_visits
from tests.daq.scale.answers import answer
from tests.examples import CONFIGS, changed, measurement_table

NIGHTS = 3
SMALL = {"positions__number": 3, "itinerary__laps": 6, "itinerary__dwell_s": 0.5, "estimate__goal_se": 1e-3}


def rehearsed(lab: Path, seed: int, **more: Any) -> Path:
    table = changed(measurement_table(), rig=str(CONFIGS / "rigs" / "lantern.toml"), **(SMALL | more))
    file = lab.parent / f"{seed}.toml"
    file.write_text(toml_text(table))
    before = set(lab.glob("runs/*"))
    assert main(["rehearse", str(file), "--link", "direct", "--seed", str(seed), "--into", str(lab)]) == 0
    (run,) = set(lab.glob("runs/*")) - before
    return run


@pytest.fixture(scope="module")
def nights(tmp_path_factory: pytest.TempPathFactory) -> list[Path]:
    lab = tmp_path_factory.mktemp("pool") / "lab"
    return [rehearsed(lab, seed) for seed in range(NIGHTS)]


def test_runs_are_pooled_as_their_estimates_are(nights, capsys):
    estimates = [estimate_run(open_visits(run)) for run in nights]

    status, found = answer(capsys, "pool", *map(str, nights))

    assert status == 0
    assert [night["run"] for night in found["nights"]] == list(map(str, nights))
    columns = ("kappa", "kappa_se", "dof", "kappa_counting_se")
    kappa, se, dof, counting = (np.array([getattr(one, name) for one in estimates]) for name in columns)
    by_hand = pool(kappa, se, dof, counting**-2.0)
    assert [night["kappa"] for night in found["nights"]] == kappa.tolist()
    assert found["pooled"]["value"] == pytest.approx(by_hand.value, rel=1e-12)
    assert found["pooled"]["welch_p"] == pytest.approx(by_hand.welch_p, rel=1e-9)
    assert found["shared"] == {"dead time": NIGHTS}
    assert found["pooled"]["se"] > by_hand.se  # the dead time that they share


@pytest.fixture(autouse=True)
def cache(tmp_path_factory: pytest.TempPathFactory, monkeypatch: pytest.MonkeyPatch) -> Path:
    folder = tmp_path_factory.mktemp("cache")
    monkeypatch.setenv("XDG_CACHE_HOME", str(folder))
    return folder / "tercet" / "nights"


@pytest.fixture
def elsewhere(nights: list[Path], tmp_path: Path) -> dict[str, list[str]]:
    return places(nights, tmp_path)


def places(nights: list[Path], folder: Path) -> dict[str, list[str]]:
    zips = [folder / f"{run.name}.zip" for run in nights]
    for run, target in zip(nights, zips, strict=True):
        pack_zip(run, target)
    return {
        "folder": [str(run) for run in nights],
        "zip": [str(path) for path in zips],
        "zip in a store": [f"file://{path}" for path in zips],
        "group in a store": [f"file://{run}/run.zarr" for run in nights],
    }


@pytest.mark.parametrize("where", ["zip", "zip in a store", "group in a store"])
def test_a_run_says_the_same_wherever_it_lies(nights, elsewhere, where):
    for run, address in zip(nights, elsewhere[where], strict=True):
        one, other = open_visits(run), open_finished(address)

        assert other.attrs["digest"] == one.attrs["digest"]
        assert estimate_run(other).kappa == estimate_run(one).kappa
        assert np.array_equal(other["values"].values, one["values"].values)


def test_a_pool_is_the_same_from_everywhere(elsewhere, tmp_path, capsys):
    folders, mixed = (
        answer(capsys, "pool", *runs, "--into", str(tmp_path / runs[1].replace("/", "_")))[1]
        for runs in (elsewhere.pop("folder"), [place[at] for at, place in enumerate(elsewhere.values())])
    )

    assert mixed["read"] == NIGHTS
    for which in ("kappa", "kappa_se", "positions"):
        assert mixed[which] == folders[which]


def damaged(run: Path, into: Path) -> Path:
    copy = Path(shutil.copytree(run, into / "runs" / run.name))
    chunk = copy / "run.zarr" / "values" / "c" / "0" / "0"
    data = bytearray(chunk.read_bytes())
    data[len(data) // 2] ^= 1
    chunk.write_bytes(data)
    return copy


def test_damaged_and_missing_runs_are_named_and_nothing_is_pooled(nights, tmp_path, capsys):
    bad = damaged(nights[0], tmp_path)
    torn = tmp_path / "torn.zip"
    pack_zip(nights[1], torn)
    torn.write_bytes(torn.read_bytes()[: torn.stat().st_size // 2])
    picture = tmp_path / "forest.svg"
    runs = [str(bad), str(torn), str(tmp_path / "nowhere"), f"file://{tmp_path}/none.zip", str(nights[2])]

    status, found = answer(capsys, "pool", *runs, "--picture", str(picture))

    assert status == 4
    said = "\n".join(found["problems"])
    assert all(run in said for run in runs[:4])
    assert str(nights[2]) not in said
    assert "Error" not in said and "object has no" not in said
    assert not picture.exists()


def test_a_run_that_changed_after_it_was_finished_is_not_pooled(nights, tmp_path, capsys):
    target = tmp_path / "night.zip"
    copy = Path(shutil.copytree(nights[0], tmp_path / "copy"))
    root = copy / "run.zarr" / "zarr.json"
    root.write_text(root.read_text().replace(open_visits(nights[0]).attrs["digest"], "0" * 64))
    pack_zip(copy, target)

    status, found = answer(capsys, "pool", str(target), str(nights[1]))

    assert status == 4
    assert "not those that the run was finished with" in found["problems"][0]


@pytest.mark.parametrize("words", [["one"], ["one", "one"]])
def test_one_run_is_no_pool(words, capsys):
    status, found = answer(capsys, "pool", *words)

    assert status == 2
    assert "two runs or more" in found["problems"][0]


def test_a_run_that_is_named_by_two_addresses_is_not_counted_twice(elsewhere, capsys):
    one, copy = elsewhere["folder"][0], elsewhere["zip in a store"][0]

    status, found = answer(capsys, "pool", one, elsewhere["folder"][1], copy)

    assert status == 2
    assert found["problems"] == [f"tercet pool: {one} and {copy} are one run. Leave one of them out."]


def without_visits(run: str) -> None:
    """Take every chunk out of a run, and leave its meta data."""
    path = Path(run.removeprefix("file://"))
    if path.suffix != ".zip":
        for chunks in (path if path.name == "run.zarr" else path / "run.zarr").rglob("c"):
            shutil.rmtree(chunks)
        return
    with zipfile.ZipFile(path) as bundle:
        held = {name: bundle.read(name) for name in bundle.namelist() if name.endswith("zarr.json")}
    with zipfile.ZipFile(path, "w") as bundle:
        for name, data in held.items():
            bundle.writestr(name, data)


@pytest.mark.parametrize("where", ["folder", "zip", "zip in a store", "group in a store"])
def test_a_second_pool_reads_no_visit_wherever_runs_lie(nights, tmp_path, capsys, where):
    copies = [Path(shutil.copytree(run, tmp_path / "runs" / run.name)) for run in nights]
    runs = places(copies, tmp_path)[where]
    _, first = answer(capsys, "pool", *runs)
    for run in runs:
        without_visits(run)

    status, again = answer(capsys, "pool", *runs)

    assert status == 0
    assert (first.pop("read"), again.pop("read")) == (NIGHTS, 0)
    assert again == first


def test_only_what_is_new_is_read(nights, tmp_path):
    runs, asked = [str(run) for run in nights], list[int]()

    def noting(job: Job, blocks: Iterable[Block]) -> Iterator[Outcome]:
        asked.append(len(all_of := list(blocks)))
        return here(job, all_of)

    pool_runs(runs[:2], noting, Kept(tmp_path))
    pool_runs(runs, noting, Kept(tmp_path))
    pool_runs(list(reversed(runs)), noting, Kept(tmp_path))

    assert asked == [2, NIGHTS - 2, 0]


def files_of(folder: Path) -> dict[Path, tuple[int, bytes]]:
    return {
        path: (path.stat().st_mtime_ns, path.read_bytes()) for path in folder.rglob("*") if path.is_file()
    }


def test_nothing_is_written_into_a_run_or_its_lab(nights, capsys):
    lab = nights[0].parents[1]
    before = files_of(lab)

    answer(capsys, "pool", *map(str, nights))

    assert files_of(lab) == before


@pytest.mark.parametrize("harm", ["flipped", "cut", "empty"])
def test_a_kept_night_that_is_damaged_is_made_anew(nights, tmp_path, harm):
    runs = [str(run) for run in nights]
    first = pool_runs(runs, here, Kept(tmp_path))
    one = min(tmp_path.iterdir())
    whole = one.read_bytes()
    flipped = whole[:500] + bytes([whole[500] ^ 1]) + whole[501:]
    one.write_bytes({"flipped": flipped, "cut": whole[:300], "empty": b""}[harm])

    again = pool_runs(runs, here, Kept(tmp_path))

    assert again.to_json() == first.to_json() | {"read": 1}
    assert one.read_bytes() == whole


def test_a_night_kept_by_another_version_of_the_estimator_gives_way(nights, tmp_path):
    runs = [str(run) for run in nights]
    pool_runs(runs, here, Kept(tmp_path, version="another"))

    found = pool_runs(runs, here, Kept(tmp_path))

    assert found.read == NIGHTS
    assert len(list(tmp_path.iterdir())) == NIGHTS


def test_where_nothing_can_be_kept_the_runs_are_pooled_all_the_same(nights, tmp_path, capsys):
    (tmp_path / "file").touch()
    inside = str(tmp_path / "file" / "kept")

    status, found = answer(capsys, "pool", *map(str, nights), "--into", inside)
    main(["pool", *map(str, nights), "--into", inside])

    assert (status, found["kept_in"], found["read"]) == (0, None, NIGHTS)
    assert f"nothing can be kept in {inside}" in capsys.readouterr().out


def night(kappa: float, se: float) -> Night:
    figures = {"kappa": kappa, "kappa_se": se, "dof": 18.0, "kappa_counting_se": se, "pairs": 19.0}
    return Night(figures, {"dead_time": 0.0, "slits": 0.0}, {"dead_time": "", "slits": ""}, "")


def given(nights: list[Night]) -> Any:
    def runner(job: Job, blocks: Iterable[Block]) -> Iterator[Outcome]:
        for block in blocks:
            yield block, nights[block[0]].to_bytes()

    return runner


def test_two_nights_that_disagree_are_told_so_and_all_figures_are_of_one_mean(tmp_path):
    found = pool_runs(["a", "b"], given([night(0.0, 1e-4), night(1e-2, 1e-4)]), Kept(tmp_path))

    assert not found.homogeneous and found.by_counts
    assert found.headline[0] == found.pooled.value
    assert found.limit is None  # a bar that is too short bounds nothing
    assert not list(tmp_path.iterdir())  # a run that the client cannot see has no name to be kept by


def test_positions_are_tested_over_the_pairs_of_all_nights(nights, tmp_path):
    found = pool_runs([str(run) for run in nights], here, Kept(tmp_path))

    each = []
    for run in nights:
        visits = open_visits(run)
        plan = plan_of_dataset(visits)
        each.append(leftover_by_pair(sums_of(visits_of(rows_of_dataset(visits), plan), plan), plan))
    rest = np.concatenate([leftover for leftover, _ in each])
    assert found.positions is not None
    assert found.positions.largest_mm == plan.positions_mm[np.argmax(np.abs(student(rest)))]
    assert found.positions.largest_t == pytest.approx(
        student(rest)[np.argmax(np.abs(student(rest)))], rel=1e-9
    )


def student(rest: NDArray[np.float64]) -> NDArray[np.float64]:
    return np.asarray(rest.mean(axis=0) / (rest.std(axis=0, ddof=1) / np.sqrt(len(rest))))


@pytest.mark.parametrize("ending", ["svg", "png", "pdf"])
def test_a_forest_is_drawn(nights, tmp_path, capsys, ending):
    picture = tmp_path / f"forest.{ending}"

    status, _ = answer(capsys, "pool", *map(str, nights), "--picture", str(picture))

    assert status == 0
    assert picture.stat().st_size > 5_000


def test_a_picture_that_cannot_be_drawn_is_refused_before_a_run_is_read(nights, tmp_path, capsys):
    kept = tmp_path / "kept"

    status, _ = answer(capsys, "pool", *map(str, nights), "--picture", "forest.gif", "--into", str(kept))

    assert status == 2
    assert not kept.exists()


def test_an_address_that_is_none_is_a_sentence(nights, capsys):
    status, found = answer(capsys, "pool", *map(str, nights), "--cluster", "nowhere://here")

    assert status == 1
    assert "no cluster with workers answers here" in found["problems"][0]


def test_blinded_nights_of_a_campaign_are_pooled_without_their_kappa(nights, tmp_path, cache, capsys):
    hidden = {"blinding": {"scope": "spring", "halfwidth": "0.1"}}
    blinded = [rehearsed(tmp_path / "lab", seed, **hidden) for seed in range(NIGHTS)]
    true = answer(capsys, "pool", *map(str, nights))[1]

    status, found = answer(capsys, "pool", *map(str, blinded))
    kept = [Night.from_bytes(path.read_bytes()[32:]) for path in cache.iterdir()]
    mixed = answer(capsys, "pool", str(nights[0]), *map(str, blinded[1:]))

    assert status == 0
    assert found["hidden"] and found["limit"] is None and found["positions"] is None
    assert len(kept) == NIGHTS  # the same counts as those of the open ones, in place of them
    assert all(one.sums is None and one.hidden_by for one in kept)
    assert abs(found["kappa"] - true["kappa"]) > 3 * true["kappa_se"]
    # Nights are rounded to a tenth of their error, and errors to two digits.
    assert found["pooled"]["welch_p"] == pytest.approx(true["pooled"]["welch_p"], abs=0.1)
    assert mixed[0] == 2
    assert "hidden by different offsets" in mixed[1]["problems"][0]
