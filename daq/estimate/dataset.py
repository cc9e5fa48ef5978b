"""From an archive's dataset to the estimate: plan and rows out of columns and attributes."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray, IntArray
from daq.estimate.plan import Plan
from daq.estimate.rows import Rows
from daq.estimate.sums import stands_of, sums_of
from daq.estimate.whole import Estimate, estimate_sums

DETECTOR = 0  # the channel that is estimated; others stand beside it in the archive

NEEDED = (
    *("slits", "openings", "positions_mm", "weights", "signs", "normalisation"),
    *("dead_time_s", "dead_time_kind", "planned_pairs"),
)


def estimate_run(dataset: Any) -> Estimate:
    """Return the estimate of a run from its dataset, the same that page and report show.

    Parameters
    ----------
    dataset
        What `daq.open_visits` gives: columns over rows in any order, the plan in its attributes.

    Raises
    ------
    ValueError
        If the attributes lack a part of the plan, or a row has an opening or a position that is not planned.
    """
    plan = plan_of_dataset(dataset)
    return estimate_sums(sums_of(stands_of(rows_of_dataset(dataset), plan), plan), plan)


def plan_of_dataset(dataset: Any) -> Plan:
    """Return the plan that a dataset carries; visits that no row shows yet stand in no stand."""
    attributes: Mapping[str, Any] = dataset.attrs
    missing = [key for key in NEEDED if key not in attributes]
    if missing:
        raise ValueError(
            f"the dataset's attributes lack {', '.join(missing)}: it carries no plan to estimate by"
        )
    openings = np.asarray(attributes["openings"], np.int64)
    positions = np.asarray(attributes["positions_mm"], float)
    return Plan(
        slits=int(attributes["slits"]),
        openings=openings,
        positions_mm=positions,
        weights=np.asarray(attributes["weights"], float),
        signs={term: np.asarray(signs, float) for term, signs in attributes["signs"].items()},
        normalisation=str(attributes["normalisation"]),
        dead_time_s=float(attributes["dead_time_s"]),
        dead_time_kind=str(attributes["dead_time_kind"]),
        planned_pairs=int(attributes["planned_pairs"]),
        goal_se=attributes.get("goal_se"),
        **_by_visit(dataset, openings, positions),
    )


def rows_of_dataset(dataset: Any) -> Rows:
    """Return the planned visits of a dataset, the detector's channel alone."""
    planned = _integers(dataset, "visit") >= 0
    return Rows(
        _integers(dataset, "visit")[planned],
        _integers(dataset, "attempt")[planned],
        _integers(dataset, "quality")[planned],
        np.asarray(dataset["values"].values[:, DETECTOR], float)[planned],
        np.asarray(dataset["live_s"].values, float)[planned],
        np.asarray(dataset["values_var"].values[:, DETECTOR], float)[planned],
    )


def _integers(dataset: Any, name: str) -> IntArray:
    return np.asarray(dataset[name].values, np.int64)


def _index(values: IntArray | FloatArray, known: IntArray | FloatArray, what: str) -> IntArray:
    """Return where each value stands among the known ones."""
    order = np.argsort(known)
    place = order[np.clip(np.searchsorted(known[order], values), 0, len(known) - 1)]
    strange = known[place] != values
    if strange.any():
        raise ValueError(f"the {what} {values[strange][0]} of a row is none of those planned")
    return place.astype(np.int64)


def _by_visit(dataset: Any, openings: IntArray, positions: FloatArray) -> dict[str, IntArray]:
    """Return what is planned for each visit that a row shows, by visit number."""
    visit = _integers(dataset, "visit")
    planned = visit >= 0
    rows = {
        "stand": _integers(dataset, "stand")[planned],
        "pair": _integers(dataset, "pair")[planned],
        "position": _index(np.asarray(dataset["position_mm"].values, float)[planned], positions, "position"),
        "opening": _index(_integers(dataset, "opening")[planned], openings, "opening"),
    }
    columns = {name: np.full(int(visit.max(initial=-1)) + 1, -1, np.int64) for name in rows}
    for name, values in rows.items():
        columns[name][visit[planned]] = values
    return columns
