"""Rehearsed nights of a study: the same bits after kill -9, faults at other moments every night."""

from __future__ import annotations

import hashlib
import os
import subprocess
import sys
import tomllib
from pathlib import Path
from typing import Any

import numpy as np

from daq import open_visits
from daq.cli.toml import toml_text
from daq.estimate import estimate_run
from daq.scale.described import read_study
from daq.scale.job import Job, drawn, job_of
from daq.scale.ledger import DONE
from daq.scale.rehearsed import reseeded
from daq.service.equip import Wanted
from daq.service.load import Wishes, load
from daq.service.start import begin
from tests.daq.scale.answers import answer
from tests.daq.scale.outside import ROOT
from tests.examples import CONFIGS, changed, measurement_table

NIGHTS = 4
FEW = {"positions.number": 3, "itinerary.laps": 4, "itinerary.dwell_s": 0.5}
ROUGH = CONFIGS / "faults" / "rough-night.toml"


def study(folder: Path, **more: Any) -> Path:
    path = folder / "study.toml"
    table = {
        "schema": 1, "name": "mine", "kernel": "rehearsed", "draws": NIGHTS, "block": 1,
        "measurement": str(CONFIGS / "lantern.toml"), "changes": FEW,
    }  # fmt: skip
    path.write_text(toml_text(table | more))
    return path


def job(folder: Path, **more: Any) -> Job:
    described, variants = read_study(study(folder, **more))
    return job_of(described.kernel, variants[""], described.seed, described.draws)


CLIENT = """
import sys
from pathlib import Path
from daq.scale.study import carry_out, here
from tests.daq.scale.test_rehearsed import job

folder = Path(sys.argv[1])
of = job(folder, faults=sys.argv[2])
carry_out(of, folder / "killed", 1, here, lambda done: print(done, flush=True))
"""


def test_a_study_of_rough_nights_that_was_killed_goes_on_to_the_same_bits(tmp_path, capsys) -> None:
    command = [sys.executable, "-c", CLIENT, str(tmp_path), str(ROUGH)]
    going = subprocess.Popen(
        command, env=os.environ | {"PYTHONPATH": str(ROOT)}, stdout=subprocess.PIPE, stderr=subprocess.PIPE
    )
    assert going.stdout is not None
    for line in going.stdout:
        if int(line) >= 2:
            break
    going.kill()
    told = going.communicate()[1]
    left = len((tmp_path / "killed" / DONE).read_text().splitlines()) - 1

    status, found = answer(
        capsys, "study", str(study(tmp_path, faults=str(ROUGH))), "--into", str(tmp_path / "killed")
    )

    assert 2 <= left < NIGHTS
    assert told == b""  # faults of nights that nobody sits through are not for the terminal
    assert status == 0
    assert found["digest"] == hashlib.sha256(drawn(job(tmp_path, faults=str(ROUGH)), 0, NIGHTS)).hexdigest()
    assert found["columns"]["complete"]["number"] == NIGHTS


def test_a_night_of_a_study_is_the_rehearsal_with_its_seed(tmp_path) -> None:
    of = job(tmp_path)
    table = {key.replace(".", "__"): value for key, value in FEW.items()}
    file = tmp_path / "lantern.toml"
    rig = str(CONFIGS / "rigs" / "lantern.toml")
    file.write_text(toml_text(changed(measurement_table(), rig=rig, **table)))
    seed = int(
        np.random.Generator(np.random.PCG64DXSM(np.random.SeedSequence(1, spawn_key=(3,)))).integers(2**31)
    )

    run, _ = begin(load(file, Wishes(seed=seed)), tmp_path / "lab", Wanted("direct"))

    night = np.frombuffer(drawn(of, 3, 1))
    assert night[of.columns.index("kappa")] == estimate_run(open_visits(run)).kappa


def test_faults_come_at_other_moments_every_night_and_are_the_same_faults() -> None:
    text = ROUGH.read_text()

    one, other = (tomllib.loads(reseeded(text, seed)) for seed in (5, 6))

    assert (one.pop("seed"), other.pop("seed")) == (5, 6)
    assert one == other
    assert one["fault"] == tomllib.loads(text)["fault"]
    assert tomllib.loads(reseeded("[[fault]]\nkind = 'late'\n", 7))["seed"] == 7
