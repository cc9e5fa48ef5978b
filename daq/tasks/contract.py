"""The contract of a bench task: visits asked for with what is known before, and the outcome of a fit."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np

from daq.description import Measurement, Rig
from daq.estimate.arrays import FloatArray
from daq.estimate.counting import true_rate_hz
from daq.records import BENCH_VISIT, Reading
from daq.tasks.panels import Panel
from daq.tasks.verdicts import Verdict
from daq.tasks.yardstick import Yardstick

ANYWHERE = -1  # the opening of a visit that stands at a place of the mask instead


Knob = Literal["detector", "attenuator", "room light"]


@dataclass(frozen=True, slots=True)
class Turn:
    """What only a person may do: which knob to set, to what, in words; `caution` is told before.

    `shown` is what the instrument itself then shows, where the person types it.
    """

    knob: Knob
    value: float
    text: str
    caution: str = ""
    shown: float | None = None


@dataclass(frozen=True, slots=True)
class Ask:
    """A visit that a task asks for; `role` tells the fit what it is.

    An `opening` (bit mask), or `ANYWHERE` and the mask's own `place_mm`; `via_mm` is gone to first;
    `early` opens the gate as soon as nothing moves, without waiting for the stage to settle; with `events`
    the fit gets the times of its counts, where the counter tells them; `turn` is what a person does before;
    `reason` is one of `daq.records.REASONS`.
    """

    role: str
    dwell_s: float
    position_mm: float = 0.0
    opening: int = ANYWHERE
    place_mm: float | None = None
    via_mm: float | None = None
    beam: Literal["", "open", "shut"] = ""
    early: bool = False
    events: bool = False
    turn: Turn | None = None
    reason: int = BENCH_VISIT


Taken = tuple[Ask, Reading]


@dataclass(frozen=True, slots=True)
class Setting:
    """What a task knows before it begins: description, yardstick, shutter, what earlier records say.

    `earlier` holds the values of each task that has a valid record, `missing` why another has none.
    """

    measurement: Measurement
    rig: Rig
    yardstick: Yardstick
    shutter: bool = False
    earlier: Mapping[str, Mapping[str, Any]] = field(default_factory=dict)
    missing: Mapping[str, str] = field(default_factory=dict)

    @property
    def open_beam(self) -> Literal["", "open"]:
        """How the shutter has to stand where light is wanted."""
        return "open" if self.shutter else ""

    @property
    def shut_beam(self) -> Literal["", "shut"]:
        """How the shutter has to stand where none is wanted."""
        return "shut" if self.shutter else ""

    def true_hz(self, seen_hz: FloatArray) -> FloatArray:
        """Return rates with the described dead time taken out [1/s]."""
        known = self.measurement.estimate
        return np.asarray(true_rate_hz(seen_hz, known.dead_time_s, known.dead_time_kind))


@dataclass(frozen=True, slots=True)
class Outcome:
    """What a task found: values and their standard errors, a verdict, one sentence, and its picture."""

    values: Mapping[str, Any]
    se: Mapping[str, Any]
    verdict: Verdict
    sentence: str
    model: str
    panels: tuple[Panel, ...]
    chi2: float | None = None
    dof: int | None = None


def counts_only(setting: Setting) -> Sequence[str]:
    """Return why a task that counts cannot be done on this rig; nothing when it can."""
    if setting.measurement.estimate.counting == "counts":
        return ()
    return ("it needs counts, and this measurement reads power.",)


@dataclass(frozen=True, slots=True)
class Task:
    """One bench task.

    `lacks` says in sentences what the rig must have and has not; `asks` gives the next visits from those that
    were taken, none when it has enough; `fit` gives the outcome. Both may raise DaqError: then nothing is
    moved any further. Its record holds for `days`, and not beyond a change of `holds_for` of the set-up.
    """

    name: str
    purpose: str
    days: float
    holds_for: tuple[str, ...]
    asks: Callable[[Setting, Sequence[Taken]], Sequence[Ask]]
    fit: Callable[[Setting, Sequence[Taken]], Outcome]
    lacks: Callable[[Setting], Sequence[str]] = counts_only


def once(visits: Callable[[Setting], Sequence[Ask]]) -> Callable[[Setting, Sequence[Taken]], Sequence[Ask]]:
    """Return the `asks` of a task that knows all its visits from the start."""
    return lambda setting, taken: () if taken else visits(setting)
