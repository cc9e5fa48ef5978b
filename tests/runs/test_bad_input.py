"""What bad input gets on the command line: a sentence and an exit status, never a traceback."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from typing import Any

import pytest

from daq.cli import main
from daq.cli.watch import BROKEN_OFF, _status_lines
from tests.examples import CONFIGS


def said(capsys, *words: str) -> tuple[int, str]:
    status = main([*words])
    return status, capsys.readouterr().err


def test_a_rig_with_three_mistakes_gets_three_sentences_in_one_message(tmp_path, capsys):
    rig = (CONFIGS / "rigs" / "lantern.toml").read_text()
    rig = rig.replace("AB = { at_mm = 4.0 }", "AB = { at_mm = 2.0 }").replace(
        "none = { at_mm = 16.0 }", "none = { at_mm = 26.0 }"
    )
    (tmp_path / "rig.toml").write_text(rig.replace('axis = "detector"', 'axis = "detector"\naxs = 1'))

    status, text = said(capsys, "check", str(tmp_path / "rig.toml"))

    assert status == 2
    assert len(text.strip().splitlines()) == 3
    assert all(line.startswith(str(tmp_path / "rig.toml")) for line in text.strip().splitlines())


@pytest.mark.parametrize(
    ("right", "wrong", "why"),
    [
        ("127.0.0.1:7802", "127.0.0.1:77802", "no port has a number above 65535"),
        ('"scpi-counter"', '"scpi-countre"', "no driver 'scpi-countre'. Name one of dialect"),
        ('"scpi-counter"', '"scpi-sensor"', "a rig has one counter, not none"),
        ("dark_rate_hz", "dark_rat_hz", "Did you mean 'dark_rate_hz'"),
        ('"wavelets"', '"wavelet"', "Known names: replay, wavelets"),
    ],
)
@pytest.mark.parametrize("file", ["lantern.toml", "rigs/lantern.toml"])
def test_check_finds_what_would_stop_a_run_at_its_devices(tmp_path, capsys, file, right, wrong, why):
    shutil.copytree(CONFIGS, tmp_path, dirs_exist_ok=True)
    rig = tmp_path / "rigs" / "lantern.toml"
    rig.write_text(rig.read_text().replace(right, wrong))

    status, text = said(capsys, "check", str(tmp_path / file))

    assert (status, why in text) == (2, True), text


def test_a_port_that_cannot_be_is_not_tried(capsys):
    gauge = str(CONFIGS / "dialects" / "text-gauge.toml")

    status, text = said(capsys, "check", gauge, "--try", "localhost:70000")

    assert (status, "no port has a number above 65535" in text) == (2, True)


def test_problems_come_as_json_too(tmp_path, capsys):
    (tmp_path / "bad.toml").write_text("schema = 1\n")

    status = main(["check", str(tmp_path / "bad.toml"), "--json"])

    figures = json.loads(capsys.readouterr().out)
    assert status == 2
    assert figures["ok"] is False
    assert len(figures["problems"]) == 5


def test_a_run_folder_below_a_file_is_an_archive_error(tmp_path, capsys):
    (tmp_path / "lab").write_text("a file, not a folder")

    status, text = said(
        capsys, "rehearse", "--hours", "1.1", "--link", "direct", "--into", str(tmp_path / "lab")
    )

    assert status == 4
    assert "is a file, not a folder" in text


@pytest.mark.parametrize("command", [["report"], ["rehearse", "--resume"], ["run", "--resume"]])
def test_a_run_that_is_not_there_is_an_archive_error(tmp_path, capsys, command):
    status, text = said(capsys, *command, str(tmp_path / "nowhere"))

    assert status == 4
    assert "there is no such run" in text


def test_a_run_without_file_or_run_asks_for_one(capsys):
    status, text = said(capsys, "run")

    assert status == 2
    assert "name a measurement file" in text


def test_a_rig_without_a_bench_cannot_be_rehearsed(tmp_path, capsys):
    rig = (CONFIGS / "rigs" / "lantern.toml").read_text()
    (tmp_path / "rigs").mkdir()
    (tmp_path / "rigs" / "lantern.toml").write_text(rig[: rig.index("\n[bench]")])
    (tmp_path / "lantern.toml").write_text((CONFIGS / "lantern.toml").read_text())

    status, text = said(capsys, "rehearse", str(tmp_path / "lantern.toml"), "--into", str(tmp_path / "lab"))

    assert status == 2
    assert "has no table [bench]" in text
    assert not (tmp_path / "lab").exists()


def test_help_is_quick_because_it_imports_nothing_heavy():
    code = (
        "import sys\nfrom daq.cli import main\ntry:\n main(['--help'])\n"
        "except SystemExit:\n print(sorted(sys.modules))"
    )

    out = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout

    modules = set(out.splitlines()[-1].strip("[]").replace("'", "").split(", "))
    assert not modules & {"numpy", "scipy", "zarr", "dash", "xarray", "pydantic", "matplotlib"}


@pytest.mark.parametrize("command", ["check", "compose", "rehearse", "run", "report"])
def test_every_command_has_help_with_an_example(command, capsys):
    with pytest.raises(SystemExit) as stopped:
        main([command, "--help"])

    text = capsys.readouterr().out
    assert stopped.value.code == 0
    assert f"example: tercet {command}" in text
    assert "--json" in text


def test_a_rehearsal_and_a_real_run_never_go_on_with_each_others_devices(tmp_path, capsys, monkeypatch):
    for theirs, other, clock in (("rehearse", "run", "virtual"), ("run", "rehearse", "real")):
        monkeypatch.setattr("daq.cli.night.read_meta", lambda folder, clock=clock: {"clock": clock})

        status, text = said(capsys, other, "--resume", str(tmp_path / "runs" / "night"))

        assert status == 2
        assert f"Use `tercet {theirs} --resume`." in text


def test_status_names_the_command_that_goes_on_with_a_broken_off_run(tmp_path):
    for kind, command in (("rehearsal", "rehearse"), ("run", "run")):
        figures: dict[str, Any] = {
            "run": "night",
            "kind": kind,
            "state": BROKEN_OFF,
            "visit": None,
            "age_s": 1.0,
            "kappa": {"value": 0.0, "se": None, "pairs": 0, "planned_pairs": 3},
            "blinding": "open",
            "ended": None,
            "muted_until_utc": None,
            "warnings": [],
            "ends_utc": None,
            "holding": None,
            "in_doubt": None,
        }

        assert any(f"tercet {command} --resume" in line for line in _status_lines(figures, tmp_path))
