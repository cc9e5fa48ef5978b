"""Panels: what the picture of a task shows, as values; `picture` draws it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np

from daq.estimate.arrays import FloatArray


@dataclass(frozen=True, slots=True)
class Curve:
    """One set of points (with `bars`, their standard errors) or a line of a picture."""

    x: FloatArray
    y: FloatArray
    label: str
    bars: FloatArray | None = None
    line: bool = False


@dataclass(frozen=True, slots=True)
class Panel:
    """One plot: what was measured and fitted; `marks` are upright lines, `names` stand at 0, 1 ..."""

    title: str
    x_label: str
    y_label: str
    curves: tuple[Curve, ...]
    marks: Mapping[str, float] = field(default_factory=dict)
    names: Sequence[str] = ()
    log_x: bool = False


def level(x: FloatArray, value: float, label: str) -> Curve:
    """Return a value as a line across a picture."""
    return Curve(x, np.full(len(x), value), label, line=True)
