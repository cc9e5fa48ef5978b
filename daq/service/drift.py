"""Drift: how the source of a rehearsal wanders, taken from a pilot or from a run of the past."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from daq.errors import DescriptionError
from daq.estimate.dataset import plan_of_dataset, rows_of_dataset
from daq.estimate.levels import levels
from daq.estimate.sensitivity import taken_visits
from daq.estimate.sums import plainly
from daq.estimate.visits import visits_of
from daq.itinerary.drawn import drawn_level
from daq.itinerary.pilot import wander_of
from daq.service.load import Loaded
from daq.storage.reader import open_visits

PILOT = "pilot"
GRID_S = 2.0
LONGER = 1.5  # faults make a night longer than its plan

Levels = Sequence[tuple[float, float]]  # run time [s], strength of the source


def with_drift(loaded: Loaded, source: str) -> Loaded:
    """Return a rehearsal whose source wanders as a pilot says ("pilot"), or as it did in a run (its folder).

    Raises
    ------
    DescriptionError
        When the description has no pilot, or the run does not say how its source stood.
    StorageError
        When the run cannot be read.
    """
    return loaded.with_levels(_drawn(loaded) if source == PILOT else levels_of(Path(source)))


def levels_of(folder: Path) -> Levels:
    """Return how the source of a run stood, stand by stand, 1 on average; its counting noise is in it."""
    dataset = open_visits(folder)
    plan = plan_of_dataset(dataset)
    visits = visits_of(rows_of_dataset(dataset), plan)
    taken = taken_visits(visits, plan, plainly(visits, plan).visits)
    if taken is None:
        raise DescriptionError((f"{folder}: too little was measured to say how its source drifted.",))
    level, _ = levels(visits, plan, taken)
    stand, middle_s = plan.stand[taken.visit], visits.middle_s[taken.visit]
    many = np.bincount(stand, minlength=len(level))
    time_s = np.bincount(stand, middle_s, len(level))[many > 0] / many[many > 0]
    strength = level[many > 0]
    order = np.argsort(time_s)
    known = order[np.isfinite(strength[order]) & (strength[order] > 0)]
    return [(float(time_s[at] - time_s[order[0]]), float(strength[at])) for at in known]


def _drawn(loaded: Loaded) -> Levels:
    """Return a course drawn from the pilot of the description, by the bench's seed."""
    if loaded.measurement.pilot is None:
        raise DescriptionError(("--drift pilot: the description has no table [pilot]. Name a run instead.",))
    wander, _ = wander_of(loaded.measurement)
    time_s = np.arange(0.0, LONGER * loaded.itinerary().total_s + GRID_S, GRID_S)
    seed = loaded.bench_seed or (loaded.rig.bench or {}).get("seed", 1)
    level = drawn_level(wander, time_s, np.random.Generator(np.random.Philox(seed)))
    return list(zip(time_s.tolist(), level.tolist(), strict=True))
