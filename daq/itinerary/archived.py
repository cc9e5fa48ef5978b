"""Archived: the itinerary that an archive holds, whatever the planner would compose today."""

from __future__ import annotations

from typing import Any

import numpy as np

from daq.itinerary.compose import Itinerary


def archived(plan: Any) -> Itinerary:
    """Return the itinerary of a run from what `open_itinerary` gives; pauses are part of its start times."""
    meta = plan.attrs
    columns = {name: np.asarray(plan[name].values) for name in plan}
    start_s, dwell_s = columns["start_s"], columns["dwell_s"]
    return Itinerary(
        opening=columns["opening"],
        position_mm=columns["position_mm"],
        start_s=start_s,
        dwell_s=dwell_s,
        stand=columns["stand"],
        lap=columns["lap"],
        pair=columns["pair"],
        forward=columns["forward"].astype(bool),
        openings=np.asarray(meta["openings"], np.int64),
        positions_mm=columns["positions_mm"],
        slits=int(meta["slits"]),
        weights=columns["weights"],
        signs={term: columns[f"sign_{term}"] for term in meta["signs"]},
        rates_hz=np.asarray(meta["expected_hz"], float),
        order=str(meta["order"]),
        seed=int(meta["seed"]),
        total_s=float(start_s[-1] + dwell_s[-1]),
        notes=tuple(meta.get("plan_notes", ())),
    )
