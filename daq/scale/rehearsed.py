"""Rehearsed nights: the whole program on simulated instruments, a night a draw, faults included."""

from __future__ import annotations

import tempfile
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from daq.errors import DaqError
from daq.estimate import estimate_run
from daq.service.load import Wishes, load
from daq.service.night import COMPLETE
from daq.service.start import Wanted, begin
from daq.storage.reader import open_visits


def night(parameters: Mapping[str, Any], generator: np.random.Generator) -> dict[str, float]:
    """Return what one rehearsed night came to; one that was broken off has no kappa.

    Parameters
    ----------
    parameters
        `texts`: name -> contents of the description's files; `measurement`: which of them; `hours`; `faults`.
    """
    seed = int(generator.integers(0, 2**31))
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        for name, text in parameters["texts"].items():
            path = folder / name
            path.parent.mkdir(parents=True, exist_ok=True)
            path.write_text(text)
        loaded = load(folder / parameters["measurement"], Wishes(hours=parameters.get("hours"), seed=seed))
        if parameters.get("faults"):
            loaded = loaded.with_faults(folder / parameters["faults"])
        began: list[Path] = []
        try:
            run, ended = begin(
                loaded, folder / "lab", Wanted("direct", on_start=lambda at, _: began.append(at))
            )
        except DaqError:
            run, ended = began[0], ""
        return _figures(run, ended == COMPLETE)


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
