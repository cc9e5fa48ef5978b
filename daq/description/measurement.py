"""The measurement: positions, order, dwell, what is expected, and how it is estimated."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, Field, model_validator

from daq.description.problems import NotNegative, Positive, ProblemsError, Table
from daq.records import TASKS


class Positions(Table):
    """Detector positions [mm]: evenly spaced from `start_mm` to `stop_mm`, or `list_mm`; and their time."""

    start_mm: float | None = None
    stop_mm: float | None = None
    number: Annotated[int, Field(ge=1, le=100_000)] | None = None
    time: Literal["uniform", "worth"] = "uniform"
    list_mm: Annotated[tuple[float, ...], Field(min_length=1)] | None = None

    @model_validator(mode="after")
    def _one_form(self) -> Positions:
        even = [key is not None for key in (self.start_mm, self.stop_mm, self.number)]
        if (self.list_mm is None and not all(even)) or (self.list_mm is not None and any(even)):
            raise ValueError("give either start_mm, stop_mm and number, or list_mm")
        if len(set(self.places_mm)) < len(self.places_mm):
            raise ValueError("every position may stand there once only")
        return self

    @property
    def places_mm(self) -> tuple[float, ...]:
        """The positions in the order of the forward lap [mm]."""
        if self.list_mm is not None:
            return self.list_mm
        assert self.start_mm is not None and self.stop_mm is not None and self.number is not None
        if self.number == 1:
            return (self.start_mm,)
        step = (self.stop_mm - self.start_mm) / (self.number - 1)
        return tuple(round(self.start_mm + step * index, 9) for index in range(self.number))


class Order(Table):
    """How the visits follow one another, and how long they count."""

    order: Literal["zigzag", "searched", "cyclic", "random", "blocked"] = "zigzag"
    laps: Annotated[int, Field(ge=2, le=1_000_000)]
    fly_back: bool = False
    dwell_s: Annotated[float, Field(gt=0, le=86_400)] | None = None
    dwell: Literal["equal", "best"] = "equal"
    dwell_floor: Annotated[float, Field(gt=0, le=1)] = 0.1
    together: Annotated[int, Field(ge=0, le=100_000)] = 1
    repeats: Annotated[int, Field(ge=1, le=3)] = 1
    search_evaluations: Annotated[int, Field(ge=1, le=10**10)] = 2_000_000
    seed: Annotated[int, Field(ge=0)] = 1
    opening_order: tuple[str, ...] | None = None

    @model_validator(mode="after")
    def _fit(self) -> Order:
        if self.repeats > 1 and self.order != "searched":
            raise ValueError("repeats above 1 needs order 'searched'")
        if self.opening_order and self.order == "searched":
            raise ValueError("give either opening_order, or order 'searched', which finds it")
        if self.order in ("cyclic", "random", "blocked") and (self.fly_back or self.together != 1):
            raise ValueError(f"order {self.order!r} knows neither fly_back nor together")
        return self


class Line(Table):
    """A periodic ripple of source or room: period, its uncertainty, relative amplitude where known."""

    period_s: Positive
    period_u_s: NotNegative = 0.0
    amplitude: Annotated[float, Field(ge=0, lt=1)] = 0.0


class Relaxing(Table):
    """Wandering about a mean: relative standard deviation, and the time in which it is forgotten."""

    sd: Positive
    time_s: Positive


class Expect(Table):
    """What the forecast counts on."""

    single_slit_rate_hz: Positive
    background_rate_hz: NotNegative = 0.0
    drift_per_sqrt_hour: NotNegative = 0.0
    relaxing: tuple[Relaxing, ...] = ()
    level_by_hour: Annotated[tuple[Positive, ...], Field(min_length=1)] = (1.0,)
    lines: tuple[Line, ...] = ()
    monitor_rate_hz: Positive | None = None


class Pilot(Table):
    """How the source wandered while it was watched: counts of a steady opening, or their structure function.

    `counts` in a row, each over `sample_s`; or the structure function of the log rate at `lags_s`.
    """

    sample_s: Positive = 1.0
    counts: Annotated[tuple[Annotated[int, Field(ge=1)], ...], Field(min_length=100)] | None = None
    lags_s: Annotated[tuple[Positive, ...], Field(min_length=1)] | None = None
    structure: tuple[NotNegative, ...] | None = None

    @model_validator(mode="after")
    def _one_form(self) -> Pilot:
        given = [part is not None for part in (self.lags_s, self.structure)]
        if (self.counts is None and not all(given)) or (self.counts is not None and any(given)):
            raise ValueError("give either counts, or lags_s and structure")
        if self.lags_s and self.structure and len(self.lags_s) != len(self.structure):
            raise ValueError("lags_s and structure need the same length")
        return self


class Heralded(Table):
    """Channel 0 counts coincidences of two others, within a window of this whole width."""

    signal: Annotated[int, Field(ge=1, le=63)]
    idler: Annotated[int, Field(ge=1, le=63)]
    window_s: Annotated[float, Field(gt=0, le=1)]


class Estimate(Table):
    """How counts, or power readings, become a residual."""

    counting: Literal["counts", "power"] = "counts"
    fano: Annotated[float, Field(gt=0, le=1e6)] = 1.0
    monitor_channel: Annotated[int, Field(ge=1, le=63)] | None = None
    heralded: Heralded | None = None
    dead_time_s: NotNegative = 0.0
    dead_time_kind: Literal["non-paralysable", "paralysable"] = "non-paralysable"
    normalisation: Literal["pairwise", "central"] = "pairwise"
    goal_se: Positive | None = None
    dead_time_u_s: NotNegative = 0.0

    @model_validator(mode="after")
    def _one_kind(self) -> Estimate:
        for_counts = self.dead_time_s or self.dead_time_u_s or self.fano != 1 or self.heralded
        if self.counting == "power" and for_counts:
            raise ValueError("dead time, fano and heralded are for counts, not for power readings")
        return self

    @property
    def channels_needed(self) -> Mapping[str, int]:
        """The channels that are named, by key."""
        named = {} if self.monitor_channel is None else {"monitor_channel": self.monitor_channel}
        if self.heralded is None:
            return named
        return named | {"heralded.signal": self.heralded.signal, "heralded.idler": self.heralded.idler}


class Limit(Table):
    """A band that a sensor's quantity has to keep while a run counts: no safety function."""

    above: float | None = None
    below: float | None = None
    settle_s: Annotated[float, Field(ge=0, le=7200)] = 60.0
    interlock: bool = False

    @model_validator(mode="after")
    def _is_a_band(self) -> Limit:
        if self.above is None and self.below is None:
            raise ValueError("give above, below, or both")
        if self.above is not None and self.below is not None and not self.above < self.below:
            raise ValueError("above has to lie under below: the band is between them")
        return self


def _about_one(band: tuple[float, float]) -> tuple[float, float]:
    if not band[0] < 1 < band[1]:
        raise ValueError("the band lies about 1, the first stand's own rate")
    return band


class Quality(Table):
    """Thresholds of the quality rules, frozen with the run; no rule on counts bites below 3.3 sigma."""

    fingerprint_p: Annotated[float, Field(gt=0, le=1e-3)] = 6.4e-5
    dispersion_p: Annotated[float, Field(gt=0, le=1e-3)] = 8e-6
    no_counts_p: Annotated[float, Field(gt=0, le=1e-3)] = 8e-6
    monitor_sigma: Annotated[float, Field(ge=3.3)] = 4.5
    gate_time: Annotated[float, Field(gt=0, le=1)] = 1e-3
    clock_step_s: Positive = 0.5
    counter_range: Annotated[float, Field(gt=0)] | None = None
    full_range: Annotated[float, Field(gt=0, le=1)] = 0.9
    overload_hz: Positive | None = None
    rate_band: Annotated[tuple[Positive, Positive], AfterValidator(_about_one)] = (0.5, 1.5)
    lap_p: Annotated[float, Field(gt=0, le=0.01)] = 1 / 380
    settle_sigma: Annotated[float, Field(ge=3.3)] = 4.0
    limits: Mapping[str, Limit] = {}


class Stop(Table):
    """How a run may end besides its plan: `goal` and `futility`; `hard_end`: never later than its plan."""

    goal: bool = False
    futility: bool = False
    hard_end: bool = False

    @model_validator(mode="before")
    @classmethod
    def _forbidden(cls, table: Any) -> Any:
        for key, why in _FORBIDDEN.items():
            if isinstance(table, Mapping) and key in table:
                raise ValueError(f"{key}: {why}. Take it out; `goal` ends a run without looking at kappa")
        return table


# Rules that people ask for, and what is left of 95 % where they choose the end (studies in DEVELOPERS.md).
_FORBIDDEN = {
    "significant": "a run that ends when kappa looks different from zero covers 77 to 84 %, not 95 %",
    "null": "a limit that is taken when it first looks good is wrong three times as often as it says",
    "error_bar": "a run that ends on its own scatter covers 90 to 94 %, not 95 %",
}


def _a_task(name: str) -> str:
    if name not in TASKS:
        raise ValueError(f"there is no task {name!r}. Name some of {', '.join(TASKS)}")
    return name


class Ready(Table):
    """Bench tasks of which a valid record has to be there before a run may be armed."""

    tasks: tuple[Annotated[str, AfterValidator(_a_task)], ...] = ("dark", "pilot", "register", "dry-lap")


class Hidden(Table):
    """Blinding: the runs that share an offset ("run", or a campaign's name), and its half width as text."""

    scope: Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9._-]*$")] = "run"
    halfwidth: Annotated[str, Field(pattern=r"^[0-9]*\.?[0-9]+(e-?[0-9]+)?$")]

    @model_validator(mode="after")
    def _above_zero(self) -> Hidden:
        if not float(self.halfwidth) > 0:
            raise ValueError("halfwidth must be above zero")
        return self


class Warn(Table):
    """Above what a condition of the night becomes a note for the morning; nothing else depends on it."""

    level_change: Positive = 0.05
    step_change: Positive = 0.005
    excess: Annotated[float, Field(ge=1)] = 1.47
    left_out_share: Annotated[float, Field(gt=0, le=1)] = 0.05
    load: Positive = 0.05
    goal_margin: Annotated[float, Field(ge=1)] = 1.1


class Measurement(Table):
    """A measurement as its file describes it."""

    schema_: Literal[1] = Field(alias="schema")
    name: Annotated[str, Field(pattern="^[a-z0-9][a-z0-9-]*$")]
    title: str = ""
    purpose: str = ""
    rig: str
    positions: Positions
    itinerary: Order
    expect: Expect
    pilot: Pilot | None = None
    estimate: Estimate = Estimate()
    quality: Quality = Quality()
    warn: Warn = Warn()
    stop: Stop = Stop()
    blinding: Hidden | None = None
    ready: Ready = Ready()
    notes: Mapping[str, Any] = {}

    @model_validator(mode="after")
    def _hidden_well(self) -> Measurement:
        found = list(self._blinding_problems()) if self.blinding else []
        if self.stop.goal and self.estimate.goal_se is None:
            found.append(("stop.goal", "it needs estimate.goal_se. Give one, or leave this out"))
        if found:
            raise ProblemsError(found)
        return self

    def _blinding_problems(self) -> Iterator[tuple[str, str]]:
        assert self.blinding is not None
        goal, half = self.estimate.goal_se, float(self.blinding.halfwidth)
        if self.estimate.normalisation != "pairwise":
            yield "blinding", "only the pairwise normalisation can be blinded. Choose it, or take this out"
        if self.stop.futility:
            yield "stop.futility", "an end for futility would tell how small a blinded kappa is. Take it out"
        if goal is not None and half < 10 * goal:
            yield (
                "blinding.halfwidth",
                f"{half:g} hides little beside a goal of {goal:g}. Give ten times that",
            )
