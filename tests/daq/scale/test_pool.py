"""Archived runs estimated anew and taken together, from folders, zips and an object store."""

from __future__ import annotations

import json
import shutil
import socket
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from daq.cli import main
from daq.cli.toml import toml_text
from daq.estimate import estimate_run, pool
from daq.scale.pool import pool_runs
from daq.scale.study import here
from daq.storage.elsewhere import open_finished
from daq.storage.pack import pack_zip
from daq.storage.reader import open_visits
from tests.examples import CONFIGS, changed, measurement_table

NIGHTS = 3
SMALL = {"positions__number": 5, "itinerary__laps": 12, "itinerary__dwell_s": 0.5, "estimate__goal_se": 1e-3}


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


def answer(capsys: pytest.CaptureFixture[str], *words: str) -> tuple[int, dict[str, Any]]:
    capsys.readouterr()
    status = main([*words, "--json"])
    return status, json.loads(capsys.readouterr().out)


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


@pytest.fixture
def elsewhere(nights: list[Path], tmp_path: Path) -> dict[str, list[str]]:
    zips = [tmp_path / f"{run.name}.zip" for run in nights]
    for run, target in zip(nights, zips, strict=True):
        pack_zip(run, target)
    return {
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


def test_a_pool_is_the_same_from_everywhere(nights, elsewhere, capsys):
    folders, mixed = (
        answer(capsys, "pool", *runs)[1]
        for runs in (list(map(str, nights)), [place[at] for at, place in enumerate(elsewhere.values())])
    )

    assert (mixed["kappa"], mixed["kappa_se"]) == (folders["kappa"], folders["kappa_se"])


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


def test_figures_that_are_kept_are_not_read_again(nights, tmp_path):
    runs = [str(run) for run in nights]
    first = pool_runs(runs, here, tmp_path / "kept")

    def nobody(job: Any, blocks: Any) -> Iterator[Any]:
        assert list(blocks) == []
        yield from ()

    again = pool_runs(runs, nobody, tmp_path / "kept")

    assert again.to_json() == first.to_json()


@pytest.mark.parametrize("ending", ["svg", "png", "pdf"])
def test_a_forest_is_drawn(nights, tmp_path, capsys, ending):
    picture = tmp_path / f"forest.{ending}"

    status, _ = answer(capsys, "pool", *map(str, nights), "--picture", str(picture))

    assert status == 0
    assert picture.stat().st_size > 5_000


def test_a_cluster_that_nobody_answers_is_a_sentence(nights, capsys):
    with socket.create_server(("127.0.0.1", 0)) as free:
        address = f"tcp://127.0.0.1:{free.getsockname()[1]}"

    status, found = answer(capsys, "pool", *map(str, nights), "--cluster", address)

    assert status == 1
    assert "no cluster with workers answers here" in found["problems"][0]


def test_blinded_nights_of_a_campaign_are_pooled_without_their_kappa(nights, tmp_path, capsys):
    hidden = {"blinding": {"scope": "spring", "halfwidth": "0.1"}}
    blinded = [rehearsed(tmp_path / "lab", seed, **hidden) for seed in range(NIGHTS)]
    true = answer(capsys, "pool", *map(str, nights))[1]

    status, found = answer(capsys, "pool", *map(str, blinded))
    mixed = answer(capsys, "pool", str(nights[0]), *map(str, blinded))

    assert status == 0
    assert found["hidden"] and found["limit"] is None
    assert abs(found["kappa"] - true["kappa"]) > 3 * true["kappa_se"]
    # Nights are rounded to a tenth of their error, and errors to two digits.
    assert found["pooled"]["welch_p"] == pytest.approx(true["pooled"]["welch_p"], abs=0.1)
    assert mixed[0] == 2
    assert "hidden by different offsets" in mixed[1]["problems"][0]


@pytest.mark.long
@pytest.mark.parametrize("where", ["zip", "zip in a store"])
def test_three_hundred_runs(nights, elsewhere, tmp_path, capsys, where):
    runs = []
    for number in range(300):
        target = tmp_path / f"night-{number}.zip"
        shutil.copy(elsewhere["zip"][number % NIGHTS], target)
        runs.append(f"file://{target}" if where == "zip in a store" else str(target))

    status, found = answer(capsys, "pool", *runs)

    assert status == 0
    assert len(found["nights"]) == 300
    assert found["pooled"]["tau"] >= 0
