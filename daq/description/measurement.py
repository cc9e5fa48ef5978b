"""The measurement: positions, order, dwell, what is expected, and how it is estimated."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import Field, model_validator

from daq.description.problems import Table
from daq.description.rig import NotNegative, Positive


class Positions(Table):
    """Detector positions [mm]: evenly spaced from `start_mm` to `stop_mm`, or `list_mm`."""

    start_mm: float | None = None
    stop_mm: float | None = None
    number: Annotated[int, Field(ge=1, le=100_000)] | None = None
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
    """How the visits follow one another."""

    order: Literal["zigzag", "blocked"] = "zigzag"
    laps: Annotated[int, Field(ge=2, le=1_000_000)]
    dwell_s: Annotated[float, Field(gt=0, le=86_400)]
    seed: Annotated[int, Field(ge=0)] = 1
    opening_order: tuple[str, ...] | None = None


class Expect(Table):
    """What the forecast counts on."""

    single_slit_rate_hz: Positive
    background_rate_hz: NotNegative = 0.0
    drift_per_sqrt_hour: NotNegative = 0.0


class Estimate(Table):
    """How counts become a residual."""

    dead_time_s: NotNegative = 0.0
    dead_time_kind: Literal["non-paralysable", "paralysable"] = "non-paralysable"
    normalisation: Literal["pairwise", "central"] = "pairwise"
    goal_se: Positive | None = None


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
    estimate: Estimate = Estimate()
    notes: Mapping[str, Any] = {}
