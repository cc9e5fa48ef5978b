"""From an archive's dataset to the estimate: plan and rows out of columns and attributes."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from daq.estimate.arrays import FloatArray, IntArray
from daq.estimate.blinding import OPEN, Blinding
from daq.estimate.counting import check_dead_time
from daq.estimate.plan import Heralded, Plan
from daq.estimate.rows import Rows
from daq.estimate.shown import shown
from daq.estimate.visits import visits_of
from daq.estimate.whole import Estimate, estimate_visits
from daq.records import Quality, Reading

NEEDED = (
    *("slits", "openings", "positions_mm", "weights", "signs", "normalisation"),
    *("dead_time_s", "dead_time_kind", "planned_pairs"),
)


HIDDEN = "hidden"  # attribute of a dataset that was opened where the secret of its blinding lies


def estimate_run(dataset: Any) -> Estimate:
    """Return the estimate of a run from its dataset, the same that page and report show, blinded as it is.

    Parameters
    ----------
    dataset
        What `daq.open_visits` gives: columns over rows in any order, the plan in its attributes.

    Raises
    ------
    ValueError
        If the attributes lack a part of the plan or hold a dead time below zero, or a row has an opening or a
        position that is not planned; if it is blinded and the secret is not at hand.
    """
    plan = plan_of_dataset(dataset)
    found = estimate_visits(visits_of(rows_of_dataset(dataset), plan), plan)
    return shown(found, plan.blinding)


def plan_of_dataset(dataset: Any) -> Plan:
    """Return the plan that a dataset carries; visits that no row shows yet stand in no stand."""
    attributes: Mapping[str, Any] = dataset.attrs
    missing = [key for key in NEEDED if key not in attributes]
    if missing:
        raise ValueError(
            f"the dataset's attributes lack {', '.join(missing)}: it carries no plan to estimate by"
        )
    check_dead_time(float(attributes["dead_time_s"]), str(attributes["dead_time_kind"]))
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
        **_counting(attributes),
        visits_per_stand=attributes.get("visits_per_stand"),
        hard_end=bool(attributes.get("hard_end", False)),
        blinding=attributes.get(HIDDEN, Blinding(str(attributes.get("blinding", OPEN)))),
        **_by_visit(dataset, openings, positions),
    )


def rows_of_dataset(dataset: Any) -> Rows:
    """Return the planned visits of a dataset."""
    planned = _integers(dataset, "visit") >= 0
    opened, closed = (_integers(dataset, f"gate_{edge}_ns")[planned] for edge in ("open", "close"))
    return Rows(
        _integers(dataset, "visit")[planned],
        _integers(dataset, "attempt")[planned],
        _integers(dataset, "quality")[planned],
        np.asarray(dataset["values"].values, float)[planned],
        np.asarray(dataset["values_var"].values, float)[planned],
        np.asarray(dataset["live_s"].values, float)[planned],
        (opened + closed) / 2e9,
    )


def readings_of_dataset(dataset: Any) -> Iterator[Reading]:
    """Yield the readings of a dataset, rows in their order, as far as estimate and rules look at them."""
    plain = ("visit", "attempt", "opening", "position_mm", "dwell_s", "live_s", "quality")
    names = (*plain, "gate_open_ns", "gate_close_ns", "utc_ns", "values", "values_var")
    columns = [dataset[name].values.tolist() for name in names]
    sliced = dataset["slices"].values if "slices" in dataset else None
    for row, numbers in enumerate(zip(*columns, strict=True)):
        field = dict(zip(names, numbers, strict=True))
        variances = tuple(field["values_var"])
        yield Reading(
            **field
            | {
                "values": tuple(field["values"]),
                "values_var": variances if variances[0] == variances[0] else None,
                "quality": Quality(field["quality"]),
                "slices": None if sliced is None else _slices(sliced[row]),
            }
        )


def _counting(attributes: Mapping[str, Any]) -> dict[str, Any]:
    """Return what a value is; an archive that does not say holds Poisson counts of one channel."""
    pairs = attributes.get("heralded")
    return {
        "counting": str(attributes.get("counting", "counts")),
        "fano": float(attributes.get("fano", 1.0)),
        "monitor": attributes.get("monitor_channel"),
        "heralded": None if pairs is None else Heralded(**pairs),
    }


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


def _by_visit(dataset: Any, openings: IntArray, positions: FloatArray) -> dict[str, Any]:
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


def _slices(table: IntArray) -> tuple[tuple[int, ...], ...] | None:
    return None if table.size == 0 or table[0, 0] < 0 else tuple(map(tuple, table.tolist()))
