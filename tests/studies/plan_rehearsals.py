"""The forecast against forty whole rehearsals of nineteen pairs, through instruments, archive and report."""

from __future__ import annotations

import json
import tempfile
from contextlib import redirect_stderr, redirect_stdout
from io import StringIO
from pathlib import Path
from typing import Any

import numpy as np

from daq.cli import main
from tests.examples import CONFIGS
from tests.studies.rows import Each, rows

NIGHTS = 40
FEWER = (
    ("number = 41 ", "number = 5 "),
    ("start_mm = -12.8", "start_mm = -2.56"),
    ("stop_mm = 12.8", "stop_mm = 2.56"),
)


def study(nights: int = NIGHTS, each: Each = rows) -> dict[str, Any]:
    """Return the root mean square standard error of rehearsals over the forecast."""
    with tempfile.TemporaryDirectory() as folder:
        foretold = _said(["compose", str(_fewer_positions(Path(folder)))])
    nightly = list(each("plan_rehearsals:night", {str(seed): [seed] for seed in range(nights)}).values())
    squares = np.square([night["kappa_se"] for night in nightly])
    ratio = float(np.sqrt(squares.mean())) / foretold["kappa_se"]
    row = {
        "nights": nights,
        "pairs": nightly[0]["pairs"],
        "foretold": foretold["kappa_se"],
        "ratio": ratio,
        "ratio_se": ratio * float(squares.std(ddof=1) / squares.mean() / 2 / nights**0.5),
        "counting ratio": float(
            np.mean([night["kappa_counting_se"] for night in nightly]) / foretold["kappa_counting_se"]
        ),
        "length ratio": float(np.mean([night["run_s"] for night in nightly])) / foretold["total_s"],
        "meets": {"ratio": 0.9 <= ratio <= 1.1},
    }
    return {"about": "Lantern at 5 positions, source -3 %/h and a walk of 1 %", "rows": {"Lantern": row}}


def night(seed: int) -> dict[str, Any]:
    """Return what one rehearsal said."""
    with tempfile.TemporaryDirectory() as folder:
        file = _fewer_positions(Path(folder))
        return _said(["rehearse", str(file), "--link", "direct", "--seed", str(seed), "--into", folder])


def _fewer_positions(lab: Path) -> Path:
    (lab / "rigs").mkdir()
    (lab / "rigs" / "lantern.toml").write_bytes((CONFIGS / "rigs" / "lantern.toml").read_bytes())
    text = (CONFIGS / "lantern.toml").read_text()
    for old, new in FEWER:
        assert old in text
        text = text.replace(old, new)
    (lab / "night.toml").write_text(text)
    return lab / "night.toml"


def _said(words: list[str]) -> dict[str, Any]:
    """Return what a command answers as JSON."""
    said = StringIO()
    with redirect_stdout(said), redirect_stderr(StringIO()):
        status = main([*words, "--json"])
    assert status == 0, said.getvalue()
    answer: dict[str, Any] = json.loads(said.getvalue().splitlines()[-1])
    return answer
