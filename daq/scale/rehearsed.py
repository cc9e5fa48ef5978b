"""Rehearsed nights: the whole program on simulated instruments, a night a draw, faults included."""

from __future__ import annotations

import logging
import re
import tempfile
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np

from daq.errors import DaqError
from daq.estimate import estimate_run
from daq.service.equip import Wanted
from daq.service.load import FAULTS, Wishes, load_changed
from daq.service.night import COMPLETE
from daq.service.start import begin
from daq.storage.reader import open_visits

COLUMNS = (
    *("complete", "visits", "pairs", "stands_left_out"),
    *("kappa", "kappa_se", "truth_kappa", "covered_95"),
)
SEED = re.compile(r"^\s*seed\s*=.*$", re.MULTILINE)


def night(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, float]:
    """Return what one rehearsed night came to; one that was broken off has what its pairs say.

    Parameters
    ----------
    parameters
        `texts`: name -> contents of the description's files, a fault script among them or not; `changes` laid
        over by dotted key; `hours`.
    """
    bench, faults = (int(seed) for seed in generator.integers(0, 2**31, 2))
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        for name, text in parameters["texts"].items():
            path = folder / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(reseeded(text, faults) if name == FAULTS else text)
        wishes = Wishes(hours=parameters.get("hours"), seed=bench)
        loaded = load_changed(folder, parameters.get("changes", {}), wishes)
        if FAULTS in parameters["texts"]:
            loaded = loaded.with_faults(folder / FAULTS)
        began: list[Path] = []
        wanted = Wanted("direct", on_start=lambda run, _: began.append(run))
        try:
            with _quietly():
                run, ended = begin(loaded, folder / "lab", wanted)
        except DaqError:
            if not began:
                raise
            run, ended = began[0], ""
        return _figures(run, ended == COMPLETE)


@contextmanager
def _quietly() -> Iterator[None]:
    """Keep what thousands of nights would tell off the terminal."""
    before = logging.root.manager.disable
    logging.disable(logging.CRITICAL)
    try:
        yield
    finally:
        logging.disable(before)


def reseeded(script: str, seed: int) -> str:
    """Return a fault script whose faults come at other moments."""
    return f"seed = {seed}\n{SEED.sub('', script, count=1)}"


def _figures(run: Path, complete: bool) -> dict[str, float]:
    visits = open_visits(run)
    found = estimate_run(visits)
    truth = visits.attrs.get("truth_kappa")
    kappa, se = (float("nan") if value is None else value for value in (found.kappa, found.kappa_se))
    truth = float("nan") if truth is None else truth
    inside = found.interval_95 is not None and found.interval_95[0] <= truth <= found.interval_95[1]
    return {
        "complete": float(complete),
        "visits": float(visits.sizes["row"]),
        "pairs": float(found.pairs),
        "stands_left_out": float(found.stands_left_out),
        "kappa": kappa,
        "kappa_se": se,
        "truth_kappa": truth,
        "covered_95": float(inside),
    }
