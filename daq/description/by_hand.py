"""What a person sets at a bench when a task asks for it; the program switches none of it."""

from __future__ import annotations

from itertools import pairwise
from typing import Annotated, Literal

from pydantic import Field, field_validator, model_validator

from daq.description.problems import NotNegative, Table

LEAST_LEVELS = 3


class Dial(Table):
    """What is set on the detector: its bias or a threshold, where it stands and how far it may be turned."""

    what: Literal["bias", "threshold"] = "bias"
    unit: Annotated[str, Field(min_length=1, max_length=12)] = "V"
    now: float
    low: float
    high: float
    wanders: NotNegative = 0.0

    @model_validator(mode="after")
    def _in_its_range(self) -> Dial:
        if not self.low < self.high:
            raise ValueError("low must lie below high")
        if not self.low <= self.now <= self.high:
            raise ValueError(f"now = {self.now:g} lies outside low .. high")
        return self


class ByHand(Table):
    """Dial of the detector; what attenuators before monitor and mask let through; a light in the room."""

    detector: Dial | None = None
    attenuators: tuple[Annotated[float, Field(gt=0, le=1)], ...] = ()
    room_light: bool = False

    @field_validator("attenuators")
    @classmethod
    def _falling(cls, value: tuple[float, ...]) -> tuple[float, ...]:
        falls = all(a > b for a, b in pairwise(value))
        if value and (len(value) < LEAST_LEVELS or value[0] != 1.0 or not falls):
            raise ValueError(
                f"{LEAST_LEVELS} or more, from 1.0 (none in the beam) down, each smaller than the one before"
            )
        return value
