"""A rehearsal through a rough night: it ends by itself, twice the same, and resumes with its script."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

from daq.cli import main
from daq.storage.log import read_log
from tests.examples import CONFIGS

SCRIPT = str(CONFIGS / "faults" / "rough-night.toml")


def rough(lab, capsys, link: str) -> dict:
    words = ["rehearse", "--hours", "1.1", "--seed", "3", "--faults", SCRIPT]
    assert main([*words, "--link", link, "--into", str(lab), "--json"]) == 0
    return dict(json.loads(capsys.readouterr().out))


def test_a_rough_night_ends_by_itself_and_the_same_over_tcp_and_in_process(tmp_path, capsys):
    first, again = rough(tmp_path, capsys, "direct"), rough(tmp_path, capsys, "tcp")

    assert first["digest"] == again["digest"]
    assert first["visits_missing"] == 0
    assert first["visits_repeated"] > 0
    assert abs(first["kappa"] - first["truth_kappa"]) <= 5 * first["kappa_counting_se"]


def test_every_fault_that_was_noticed_stands_in_the_log(tmp_path, capsys):
    figures = rough(tmp_path, capsys, "direct")

    faults = [entry for entry in read_log(Path(figures["run"])) if entry["event"] == "fault"]

    assert faults
    assert all(entry["kind"] in ("timeout", "lost", "garbage", "refused") for entry in faults)


@pytest.mark.parametrize(
    ("text", "words"),
    [("seed = ", "not a TOML file"), ('[[fault]]\ndevice = "counter"\nkind = "gremlin"\nat_s = 1\n', "kind")],
)
def test_a_script_that_cannot_be_meant_is_a_sentence(tmp_path, capsys, text, words):
    (tmp_path / "faults.toml").write_text(text)

    status = main(
        ["rehearse", "--hours", "1.1", "--faults", str(tmp_path / "faults.toml"), "--into", str(tmp_path)]
    )

    assert status == 2
    assert words in capsys.readouterr().err
    assert not (tmp_path / "runs").exists()


@pytest.mark.parametrize(("free", "status"), [(5e8, 0), (1e8, 1)])
def test_a_full_disk_holds_a_rehearsal_until_there_is_room_or_ends_it_cleanly(tmp_path, capsys, free, status):
    fault = f'kind = "disk-full"\nat_s = 1000\nseconds = 600\nfree_bytes = {free:g}\n'
    (tmp_path / "faults.toml").write_text(f"[[fault]]\n{fault}")
    words = ["rehearse", "--hours", "1.1", "--link", "direct", "--faults", str(tmp_path / "faults.toml")]

    assert main([*words, "--into", str(tmp_path / "lab"), "--json"]) == status

    figures = json.loads(capsys.readouterr().out)
    told = [str(one.get("text")) for one in read_log(Path(figures["run"]))]
    assert figures["finished"] and any("are free on the disk" in text for text in told)
    assert (figures["visits_missing"] == 0) == (status == 0)
