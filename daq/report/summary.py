"""Summary: the figures of a run as one JSON object, from its archive alone."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import asdict
from pathlib import Path
from typing import Any

import numpy as np
import xarray as xr

from daq import openings
from daq.estimate import estimate_run, plan_of_dataset
from daq.estimate.account import Account, account_of
from daq.estimate.blinding import OPEN, Blinding
from daq.estimate.budget import SYSTEMATIC, Budget
from daq.estimate.closing import closing_of
from daq.estimate.geometry import geometry_of
from daq.estimate.rejudge import rejudged
from daq.estimate.shown import shown_table


def summary(folder: Path, visits: xr.Dataset, digests: Mapping[str, str]) -> dict[str, Any]:
    """Return visits done and lost, the residual with its bars, truth and digests; None where undefined.

    Parameters
    ----------
    folder
        Where the archive stands, told as it is.
    visits
        All visits of the run, with its record as attributes.
    digests
        Name -> digest of the visits.
    """
    meta = visits.attrs
    estimate = estimate_run(visits)
    hidden = plan_of_dataset(visits).blinding
    account = account_of(visits)
    closing = closing_of(visits, estimate, _systematic(account.budget))
    return {
        "run": str(folder),
        "name": meta["run"],
        "title": meta["title"],
        "kind": meta["kind"],
        "finished": bool(meta.get("finished", False)),
        "damaged": list(meta.get("damaged", ())),
        "recorded_kappa": _recorded_kappa(meta),
        **estimate.to_json(),
        "account": _shown_account(account, hidden),
        **closing.to_json(),
        "blinding": hidden.state,
        "geometry": None if (found := geometry_of(visits)) is None else asdict(found),
        **_judged(visits),
        "openings_missing": _missing(visits),
        **_tally(visits),
        **_live(visits),
        "truth_kappa": None if hidden.hides else meta.get("truth_kappa"),
        "stop": meta.get("stop"),
        "ended": meta.get("ended"),
        "planned_se": meta.get("planned_se"),
        **digests,
    }


def _recorded_kappa(meta: Mapping[str, Any]) -> float | None:
    """Return kappa as it was written when the run was finished; not while it is blinded."""
    if str(meta.get("blinding", OPEN)) != OPEN:
        return None
    kappa: float | None = meta.get("results", {}).get("kappa")
    return kappa


def _judged(visits: xr.Dataset) -> dict[str, Any]:
    """Return how many rows the frozen rules judge otherwise than while it ran, and what laps showed."""
    quality, noticed = rejudged(visits)
    differ = int(np.count_nonzero(quality != visits["quality"].values))
    return {"quality_differs": differ, "noticed": noticed}


def _shown_account(account: Account, hidden: Blinding) -> dict[str, Any]:
    found = account.to_json()
    return found | {name: shown_table(found[name], hidden) for name in ("budget", "checks")}


def _systematic(budget: Budget | None) -> list[float]:
    lines = () if budget is None else budget.lines
    return [line.value for line in lines if line.kind == SYSTEMATIC and line.value is not None]


def _missing(visits: xr.Dataset) -> list[str]:
    """Return the openings of the mask that no visit of the run has measured yet."""
    seen = set(visits["opening"].values[visits["visit"].values >= 0].tolist())
    return [openings.name(mask) for mask in visits.attrs["openings"] if mask not in seen]


def _tally(visits: xr.Dataset) -> dict[str, int]:
    """Return how many visits were done, repeated and lost."""
    number, attempt = visits["visit"].values, visits["attempt"].values
    planned = number >= 0
    done = np.unique(number[planned])
    return {
        "visits": int(number.size),
        "visits_planned": int(visits.attrs["visits_planned"]),
        "visits_done": int(done.size),
        "visits_repeated": int((planned & (attempt > 1)).sum()),
        "visits_not_used": int((planned & ~visits["use"].values.astype(bool)).sum()),
        "visits_missing": int(visits.attrs["visits_planned"]) - int(done.size),
    }


def _live(visits: xr.Dataset) -> dict[str, float | None]:
    if visits.sizes["row"] == 0:
        return {"live_s": 0.0, "run_s": 0.0, "live_fraction": None}
    live_s = float(visits["live_s"].values.sum())
    run_s = float(visits["gate_close_ns"].values.max() - visits["gate_open_ns"].values.min()) / 1e9
    return {"live_s": live_s, "run_s": run_s, "live_fraction": live_s / run_s}
