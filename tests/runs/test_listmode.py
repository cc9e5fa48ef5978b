"""A rehearsal in list mode: every event of every channel is in the archive, and adds up to the counts."""

from __future__ import annotations

import shutil
from pathlib import Path

import numpy as np

import daq
from daq.service.equip import Wanted
from daq.service.load import load
from daq.service.start import begin
from daq.storage.events import read_events
from daq.storage.verify import verify
from tests.examples import CONFIGS

RIG = {
    'driver = "scpi-counter"': 'driver = "list-mode-counter"\nstream = "tcp://127.0.0.1:7807"\n'
    "channels = 2\nslices = 10",
    "single_slit_rate_hz = 40e3": "single_slit_rate_hz = 400\n"
    'channels = [{}, {sees = "monitor", rate_hz = 900}]',
}
NIGHT = {"number = 41": "number = 3", "laps = 38": "laps = 2"}


def written(path: Path, changes: dict[str, str]) -> None:
    text = path.read_text()
    for old, new in changes.items():
        assert old in text, old
        text = text.replace(old, new)
    path.write_text(text)


def test_events_slices_and_counts_of_a_rehearsal_agree(tmp_path: Path) -> None:
    shutil.copytree(CONFIGS, tmp_path / "configs")
    written(tmp_path / "configs" / "rigs" / "lantern.toml", RIG)
    written(tmp_path / "configs" / "lantern.toml", NIGHT)

    run, _ = begin(load(tmp_path / "configs" / "lantern.toml"), tmp_path / "lab", Wanted("direct"))

    visits = daq.open_visits(run)
    values, rows = visits["values"].values, visits.sizes["row"]
    events = [np.bincount(times % 2, minlength=2) for times in read_events(run, range(rows))]
    assert rows == 48
    np.testing.assert_array_equal(events, values)
    np.testing.assert_array_equal(visits["slices"].values.sum(axis=1), values)
    assert not verify(run).problems
