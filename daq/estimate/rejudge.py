"""Judging again: the quality bits of an archive, worked out from its own columns."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import replace
from typing import Any

import numpy as np

from daq import openings
from daq.estimate.arrays import IntArray
from daq.estimate.dataset import plan_of_dataset, readings_of_dataset
from daq.estimate.judge import Judge
from daq.estimate.quality import encoder_bits, rules_of
from daq.records import Quality, Reading

# What can be worked out again; a counter's own overflow flag, and sensors, cannot.
AGAIN = (
    Quality.OFF_TARGET
    | Quality.MOVED
    | Quality.DISPERSION
    | Quality.GATE_TIME
    | Quality.CLOCK_STEP
    | Quality.NO_COUNTS
    | Quality.FINGERPRINT
    | Quality.MONITOR
    | Quality.RATE
)


def judged_again(dataset: Any) -> IntArray:
    """Return the quality of every row as the frozen rules give it off line; see `rejudged`."""
    return rejudged(dataset)[0]


def rejudged(dataset: Any) -> tuple[IntArray, list[str]]:
    """Return the quality of every row as the frozen rules give it off line, and what laps showed besides.

    Parameters
    ----------
    dataset
        What `daq.open_visits` gives, rows in the order in which they were committed.
    """
    attributes: Mapping[str, Any] = dataset.attrs
    expected = attributes.get("expected_hz")
    judge = Judge(
        plan_of_dataset(dataset),
        rules_of(attributes.get("quality", {})),
        None if expected is None else np.asarray(expected, float),
    )
    quality, notes = [], []
    for reading in _readings(dataset):
        quality.append(int(judge.judge(reading).quality))
        notes += [*judge.notes, *([judge.labels] if judge.labels and judge.labels not in notes else [])]
    return np.array(quality, np.int64), notes


def _readings(dataset: Any) -> Iterator[Reading]:
    """Yield readings without the bits that can be worked out again, but for those of the encoders."""
    axes = dataset.attrs.get("tolerance_mm", {})
    ends = {
        axis: [dataset[f"encoder_{axis}_{edge}_mm"].values for edge in ("open", "close")] for axis in axes
    }
    for row, reading in enumerate(readings_of_dataset(dataset)):
        if reading.visit < 0:  # where it was to stand is not in the archive, and no rule looks at it
            yield reading
            continue
        bits = Quality(reading.quality & ~AGAIN)
        if axes:
            seen = {axis: (float(opened[row]), float(closed[row])) for axis, (opened, closed) in ends.items()}
            bits |= encoder_bits(_targets(dataset.attrs, reading), seen, axes)
        yield replace(reading, quality=bits)


def _targets(attributes: Mapping[str, Any], reading: Reading) -> dict[str, float]:
    shown = attributes["targets_mm"][openings.name(reading.opening)]
    return {**shown, attributes["axes"][-1]: reading.position_mm}
