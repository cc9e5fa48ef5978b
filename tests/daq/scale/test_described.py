"""What a study may be asked for: coverage, orders, dwell, faults; and what its file gets wrong."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from daq.cli import main
from daq.cli.toml import toml_text
from daq.errors import DescriptionError
from daq.scale.described import read_study
from daq.scale.job import drawn, job_of
from tests.daq.scale.answers import answer
from tests.examples import CONFIGS

EXAMPLES = {"coverage": 1, "orders": 4, "dwell": 5, "faults": 1}
LANTERN = str(CONFIGS / "lantern.toml")
PLAIN: dict[str, Any] = {"schema": 1, "name": "mine", "draws": 4, "measurement": LANTERN}
FEW = {"positions.number": 3, "itinerary.laps": 4}


def written(folder: Path, **more: Any) -> Path:
    path = folder / "study.toml"
    path.write_text(toml_text(PLAIN | {"changes": FEW} | more))
    return path


def test_every_example_is_named_here() -> None:
    assert {path.stem for path in (CONFIGS / "studies").glob("*.toml")} == set(EXAMPLES)


@pytest.mark.parametrize("name", EXAMPLES)
def test_every_example_can_be_drawn(name: str) -> None:
    study, variants = read_study(CONFIGS / "studies" / f"{name}.toml")

    jobs = [job_of(study.kernel, parameters, study.seed, study.draws) for parameters in variants.values()]

    assert len({job.key for job in jobs}) == EXAMPLES[name]
    assert study.kernel == "rehearsed" or all(len(drawn(job, 1, 1)) == job.draw_bytes for job in jobs)


def test_each_value_that_is_varied_is_a_study_of_its_own_with_the_same_seeds(tmp_path, capsys) -> None:
    varied = written(tmp_path, vary={"itinerary.dwell_s": [1.0, 2.0]})
    status, found = answer(capsys, "study", str(varied), "--into", str(tmp_path / "all"))
    alone = written(tmp_path, changes=FEW | {"itinerary.dwell_s": 2.0})
    one = answer(capsys, "study", str(alone), "--into", str(tmp_path / "one"))[1]

    assert status == 0
    assert [each["variant"] for each in found["variants"]] == [
        "itinerary.dwell_s = 1.0",
        "itinerary.dwell_s = 2.0",
    ]
    assert found["variants"][1]["digest"] == one["digest"] != found["variants"][0]["digest"]


def test_variants_are_told_column_by_column(tmp_path, capsys) -> None:
    varied = written(tmp_path, vary={"itinerary.order": ["zigzag", "random"]})

    assert main(["study", str(varied), "--into", str(tmp_path / "all")]) == 0

    lines = capsys.readouterr().out.splitlines()
    at = next(at for at, line in enumerate(lines) if line.startswith("kappa_se"))
    assert [line.split()[2] for line in lines[at + 1 : at + 3]] == ["zigzag", "random"]


def test_hours_say_how_many_laps_a_night_has(tmp_path) -> None:
    _, short = read_study(written(tmp_path, hours=0.05, changes={"positions.number": 3}))
    _, long = read_study(written(tmp_path, hours=0.1, changes={"positions.number": 3}))

    laps = [given[""]["measurement"]["itinerary"]["laps"] for given in (short, long)]
    assert laps[0] >= 2
    assert laps[1] >= 2 * laps[0]


@pytest.mark.parametrize(
    ("more", "said"),
    [
        ({"changes": {"itinerary.dwel_s": 2.0}}, "dwell_s"),
        ({"changes": {"itinerary.dwell_s.mean": 2.0}}, "dwell_s is no table"),
        ({"changes": {"rig": "nowhere.toml"}}, "nowhere.toml: no such file"),
        ({"vary": {"itinerary.order": ["zigzag"], "itinerary.dwell_s": [1.0]}}, "vary"),
        ({"vary": {"itinerary.order": ["zigzag", "sideways"]}}, "order"),
        ({"faults": "faults.toml"}, "for kernel 'rehearsed' only"),
        ({"kernel": "rehearsed", "faults": "nowhere.toml"}, "no such file"),
        ({"measurement": None}, "needs one"),
        ({"draws": 0}, "draws"),
        ({"drawz": 3}, "draws"),
    ],
)
def test_what_a_study_gets_wrong_is_said_before_anything_is_drawn(tmp_path, more, said) -> None:
    with pytest.raises(DescriptionError, match=said):
        read_study(written(tmp_path, **more))
