"""The contract of a bench task: visits asked for, readings fitted, a verdict, and what the record says."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

import numpy as np
from scipy.stats import chi2 as chi2_distribution

from daq.description import Measurement, Rig
from daq.errors import DaqError
from daq.estimate.arrays import FloatArray
from daq.estimate.counting import true_rate_hz
from daq.records import BENCH_VISIT, Reading
from daq.tasks.yardstick import Yardstick

Verdict = Literal["pass", "doubtful", "fail"]
DIM = 0.1  # of the described light: with less of it nothing is measured
ODD_P = 1e-3  # a fit less probable than this is doubtful
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


def hopeless(task: str, what: str, remedy: str) -> DaqError:
    """Return the error that ends a task: what was seen, and what to do."""
    return DaqError(what, where=f"task {task}", remedy=remedy)


def refuse_dark(task: str, setting: Setting, brightest_hz: float) -> None:
    """Refuse what was counted at the brightest place when next to none of the described light fell there."""
    expected_hz = setting.yardstick.brightest_hz
    if brightest_hz < DIM * expected_hz:
        raise hopeless(
            task,
            f"{brightest_hz:.3g} a second were counted where {expected_hz:.3g} are described",
            "Look for the beam, the shutter and the detector, and at what the description expects",
        )


def within(value: float, se: float, limit: float) -> Verdict:
    """Return how a value stands to the limit that it must not pass; nearer than its error is doubtful."""
    if value + se <= limit:
        return "pass"
    return "doubtful" if value - se <= limit else "fail"


def worst(*verdicts: Verdict) -> Verdict:
    """Return the worst of several verdicts."""
    return max(verdicts, key=("pass", "doubtful", "fail").index)


def level(x: FloatArray, value: float, label: str) -> Curve:
    """Return a value as a line across a picture."""
    return Curve(x, np.full(len(x), value), label, line=True)


def fits(chi2: float, dof: int) -> Verdict:
    """Return "doubtful" where chance alone is farther off less than once in a thousand."""
    return "pass" if dof < 1 or chi2_distribution.sf(chi2, dof) >= ODD_P else "doubtful"
