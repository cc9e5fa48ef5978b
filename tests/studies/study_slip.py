"""Slip: an axis that moves behind its encoder's back; how often the counts tell, by how far it slipped.

python -m tests.studies.study_slip [nights]

Short rehearsals in process: 5 positions, 12 laps; the detector slips once, unseen by its encoder, at a random
moment of the middle half. It is detected when a stand after it is left out by the rule that compares a stand
with the earlier ones at its position; before it, that is a false alarm.
"""

from __future__ import annotations

import logging
import sys
import tempfile
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from daq import open_visits
from daq.records import Quality
from daq.service.equip import Wanted
from daq.service.load import Wishes, load
from daq.service.start import begin
from tests.examples import CONFIGS

SIZES_MM = (0.0, 0.003, 0.01, 0.03, 0.1)
LAPS = 12


@dataclass
class Told:
    """What nights of one size told."""

    nights: int = 0
    detected: int = 0
    false: int = 0
    after: int = 0


def described(folder: Path) -> Path:
    """Write the Lantern measurement with few positions and laps, and return its path."""
    (folder / "rigs").mkdir()
    (folder / "rigs" / "lantern.toml").write_text((CONFIGS / "rigs" / "lantern.toml").read_text())
    text = (CONFIGS / "lantern.toml").read_text()
    for key, value in (("number = 41", "number = 5"), ("laps = 38", f"laps = {LAPS}")):
        assert key in text
        text = text.replace(key, value)
    (folder / "lantern.toml").write_text(text)
    return folder / "lantern.toml"


def night(folder: Path, size_mm: float, seed: int) -> tuple[int, int, int]:
    """Return stands left out before the slip and after it, and stands after it."""
    path = described(folder)
    loaded = load(path, Wishes(seed=seed))
    whole_s = loaded.itinerary().total_s
    at_s = float(np.random.default_rng(seed).uniform(0.25, 0.75)) * whole_s
    if size_mm:
        script = folder / "slip.toml"
        fault = f'kind = "slip"\naxis = "detector"\nat_s = {at_s}\nsize_mm = {size_mm}\nhidden = true\n'
        script.write_text(f"[[fault]]\n{fault}")
        loaded = loaded.with_faults(script)
    run, _ = begin(loaded, folder / "lab", Wanted(transport="direct"))
    visits = open_visits(run)
    late = visits["gate_open_ns"].values > at_s * 1e9
    odd = (visits["quality"].values & int(Quality.FINGERPRINT)) > 0
    stands = len(np.unique(visits["stand"].values[late]))
    return int((odd & ~late).sum()), int((odd & late).sum()), stands


def main(nights: int) -> None:
    """Print how often each size was detected."""
    logging.disable(logging.ERROR)
    for size_mm in SIZES_MM:
        told = Told()
        for seed in range(1, nights + 1):
            with tempfile.TemporaryDirectory() as folder:
                before, after, _ = night(Path(folder), size_mm, seed)
            told.nights += 1
            told.detected += after > 0
            told.false += before > 0
            told.after += after
        print(
            f"slip of {size_mm:5.3f} mm: detected in {told.detected:3} of {told.nights} nights "
            f"({told.after / told.nights:.1f} stands left out after it), false alarms before it {told.false}",
            flush=True,
        )


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else 20)
