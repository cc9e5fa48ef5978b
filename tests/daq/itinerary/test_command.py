"""The command compose: table, picture, and a description that run and rehearse take as it is."""

import json
import tomllib

import numpy as np
import pytest

from daq.cli import main
from daq.cli.toml import toml_text
from daq.service.load import Wishes, load
from tests.examples import CONFIGS

LANTERN = CONFIGS / "lantern.toml"


def changed_file(folder, *changes):
    """Write the Lantern measurement with texts replaced beside its rig and return its path."""
    (folder / "rigs").mkdir()
    for rig in (CONFIGS / "rigs").glob("lantern.toml"):
        (folder / "rigs" / rig.name).write_text(rig.read_text())
    text = LANTERN.read_text()
    for old, new in changes:
        assert old in text
        text = text.replace(old, new)
    (folder / "night.toml").write_text(text)
    return folder / "night.toml"


def test_the_table_has_the_budget_the_orders_and_the_verdict(capsys):
    status = main(["compose", str(LANTERN)])

    told = capsys.readouterr().out
    assert status == 0
    assert "12464 visits, 38 laps, 19 pairs" in told
    assert "counting  " in told
    assert "dead time (a shift)" in told
    for order in ("zigzag*", "searched", "cyclic", "random", "blocked"):
        assert f"\n{order} " in told
    assert "The goal of ± 1.00e-04 is not met in 9.9 h" in told
    assert 'With dwell = "best" it takes' in told


def test_programs_get_the_same_as_json(capsys):
    main(["compose", str(LANTERN), "--json", "--hours", "2"])

    figures = json.loads(capsys.readouterr().out)
    assert {"visits", "laps", "pairs", "live_s", "total_s", "duty", "kappa_se", "q"} <= set(figures)
    assert figures["pairs"] == 3
    assert figures["total_s"] <= 7200
    assert set(figures["orders"]) == {"zigzag", "searched", "cyclic", "random", "blocked"}
    assert "not met in 1.6 h" in figures["verdict"]
    assert len(figures["remedies"]) >= 3


@pytest.mark.parametrize(("ending", "order"), [("svg", "zigzag"), ("png", "blocked"), ("pdf", "random")])
def test_the_picture_is_drawn(tmp_path, ending, order):
    path = tmp_path / f"plan.{ending}"

    status = main(["compose", str(LANTERN), "--hours", "1.1", "--order", order, "--picture", str(path)])

    begins = {"svg": b"<?xml", "png": b"\x89PNG", "pdf": b"%PDF"}
    assert status == 0
    assert path.read_bytes().startswith(begins[ending])


def test_the_picture_names_what_it_shows(tmp_path):
    path = tmp_path / "plan.svg"

    main(["compose", str(LANTERN), "--hours", "1.1", "--picture", str(path)])

    text = path.read_text()
    assert "Lantern bench" in text
    for words in ("visits: where the detector stands", "forecast: one standard error", "orders on this rig"):
        assert f"<!-- {words}" in text


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (["--picture", "plan.gif"], "a picture ends in .svg, .png, .pdf"),
        (["--picture", "nowhere/plan.svg"], "no such file or directory"),
        (["--write", "nowhere/plan.toml"], "no such file or directory"),
    ],
)
def test_a_place_that_cannot_be_written_to_is_a_sentence(tmp_path, monkeypatch, capsys, words, said):
    monkeypatch.chdir(tmp_path)

    status = main(["compose", str(LANTERN), "--hours", "1.1", *words])

    assert status == 2
    assert said in capsys.readouterr().err


@pytest.mark.parametrize(
    "changes",
    [
        [],
        [('order = "zigzag"', 'order = "searched"'), ("repeats = 1", "repeats = 2"),
         ("drift_per_sqrt_hour = 0.01", "drift_per_sqrt_hour = 0.2")],
        [("\ndwell_s = 2.2", "\n# dwell_s = 2.2"), ('dwell = "equal"', 'dwell = "best"'),
         ('time = "uniform"', 'time = "worth"')],
        [("together = 1", "together = 0"), ("fly_back = false", "fly_back = true")],
        [('order = "zigzag"', 'order = "random"')],
        [("# lines = [{ period_s = 900, period_u_s = 5,", "lines = [{ period_s = 160, period_u_s = 150,")],
    ],
    ids=["as it is", "searched word", "best dwell", "nested, fly back", "random", "pauses"],
)  # fmt: skip
def test_what_is_written_gives_the_same_visits(tmp_path, changes):
    small = (("number = 41 ", "number = 7 "), ("dead_time_u_s = 2e-9", "dead_time_u_s = 0.0"))
    file = changed_file(tmp_path, *small, *changes)
    (tmp_path / "plans").mkdir()
    plan = tmp_path / "plans" / "tonight.toml"

    status = main(["compose", str(file), "--hours", "0.6", "--seed", "5", "--write", str(plan)])

    first, again = load(file, Wishes(hours=0.6, seed=5)).itinerary(), load(plan).itinerary()
    assert status == 0
    assert plan.read_text().startswith("# Composed from night.toml.")
    for name in (
        "opening",
        "position_mm",
        "start_s",
        "dwell_s",
        "stand",
        "lap",
        "pair",
        "forward",
        "weights",
    ):
        assert np.array_equal(getattr(first, name), getattr(again, name)), name
    assert first.pauses == again.pauses
    assert bool(first.pauses) == ("period_u_s = 150," in file.read_text())


def test_a_table_survives_being_written_as_toml():
    table = {
        "name": 'a "quoted" name\nwith a line',
        "number": 4e-8,
        "yes": True,
        "empty": {},
        "list": [1, 2.5, "x"],
        "inner": {"key with space": "ü", "deeper": {"tables": [{"period_s": 900.0}, {"period_s": 20.0}]}},
    }

    assert tomllib.loads(toml_text(table | {"left out": None})) == table


@pytest.mark.parametrize(
    ("old", "new", "said"),
    [
        ("goal_se = 1e-4", "goal_se = 1.6e-5", r"estimate.goal_se: ± 1.60e-05 needs 4"),
        ("stop_mm = 12.8", "stop_mm = 22.8", "lies outside the limits -15 .. 15 mm of axis 'detector'"),
        ("dwell_s = 2.2", "dwell_s = 0.0", "itinerary.dwell_s: input should be greater than 0"),
        ("laps = 38", "laps = 1", "itinerary.laps: input should be greater than or equal to 2"),
        ('time = "uniform"', 'time = "best"', "positions.time: input should be 'uniform' or 'worth'"),
        ("repeats = 1", "repeats = 2", "repeats above 1 needs order 'searched'"),
        ('order = "zigzag"', 'order = "cyclic"\nfly_back = true', "not a TOML file"),
        ("fly_back = false", 'order = "cyclic"', "not a TOML file"),
        ("together = 1", "together = -1", "itinerary.together: input should be greater than or equal to 0"),
        ("# opening_order", 'opening_order = ["A"] #', "name every opening of the mask, and no other"),
        ("# sample_s = 1.0", "[pilot]\nlags_s = [1.0]", "give either counts, or lags_s and structure"),
    ],
)
def test_a_plan_that_cannot_be_meant_gets_a_sentence_and_exit_2(tmp_path, capsys, old, new, said):
    file = changed_file(tmp_path, (old, new))

    status = main(["compose", str(file)])

    told = capsys.readouterr().err
    assert status == 2
    assert said in told
    assert len(told.strip().splitlines()) == 1


@pytest.mark.parametrize("command", ["check", "compose"])
def test_a_goal_that_needs_400_hours_comes_with_what_the_plan_gives_and_what_would_help(
    tmp_path, capsys, command
):
    file = changed_file(tmp_path, ("goal_se = 1e-4", "goal_se = 1.6e-5"))

    status = main([command, str(file)])

    told = capsys.readouterr().err
    assert status == 2
    assert "9.9 h give ± 1.03e-04" in told
    assert 'With dwell = "best" it takes' in told
    assert "times as bright would do" in told


def test_the_same_goal_in_an_order_for_comparison_is_told_and_not_refused(tmp_path, capsys):
    status = main(["compose", str(LANTERN), "--order", "blocked"])

    told = capsys.readouterr().out
    assert status == 0
    assert "out of reach" in told
    assert "drift of the source does not cancel" in told


def test_a_dwell_shorter_than_the_counter_can_gate_is_refused(tmp_path, capsys):
    file = changed_file(tmp_path, ("dwell_s = 2.2", "dwell_s = 0.3"))
    rig = tmp_path / "rigs" / "lantern.toml"
    rig.write_text(rig.read_text().replace("# shortest_gate_s = 0.001", "shortest_gate_s = 0.5"))

    status = main(["compose", str(file)])

    assert status == 2
    assert "the counter of the rig opens its gate for 0.5 s at least, not 0.3 s" in capsys.readouterr().err


@pytest.mark.parametrize("again", ["AB = { at_mm = 18.0 }", "BA = { at_mm = 18.0 }"])
def test_an_opening_cut_twice_is_refused(tmp_path, capsys, again):
    file = changed_file(tmp_path)
    rig = tmp_path / "rigs" / "lantern.toml"
    rig.write_text(rig.read_text().replace("B = { at_mm = 6.0 }", f"B = {{ at_mm = 6.0 }}\n{again}"))

    status = main(["compose", str(file)])

    told = capsys.readouterr().err
    assert status == 2
    assert "lantern.toml" in told
    assert "AB" in told or "BA" in told or "overwrite" in told


def test_a_mask_without_all_openings_says_which_terms_remain(tmp_path, capsys):
    file = changed_file(tmp_path)
    rig = tmp_path / "rigs" / "lantern.toml"
    rig.write_text(rig.read_text().replace("ABC = { at_mm = 10.0 }\n", ""))

    status = main(["compose", str(file)])

    assert status == 2
    assert "the mask lacks ABC; the residual needs every opening once. Terms that remain: AB, AC, BC." in (
        capsys.readouterr().err
    )
