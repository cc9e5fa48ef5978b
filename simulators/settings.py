"""Settings: the table [bench] of a rig file, which only the simulators read."""

from __future__ import annotations

from collections.abc import Mapping
from datetime import datetime
from typing import Annotated, Literal

from pydantic import AwareDatetime, Field, ValidationError

from daq.description import Rig
from daq.description.problems import Table, every_problem
from daq.errors import DescriptionError

_Rate = Annotated[float, Field(ge=0, le=1e12)]
_Small = Annotated[float, Field(ge=0, le=1.0)]


# What stands behind a device whose driver fits more than one simulated instrument.
Model = Literal[
    "gcode-stage",
    "scpi-stage",
    "scpi-totaliser-26",
    "scpi-totaliser-32",
    "scpi-frequency",
    "gauge",
    "shutter",
]


class SourceSettings(Table):
    """How the source drifts, relative; the kinds multiply."""

    linear_per_hour: float = 0.0
    random_walk_per_sqrt_hour: Annotated[float, Field(ge=0, le=10)] = 0.0


class Settings(Table):
    """The simulated truth."""

    model: Literal["wavelets"]
    seed: Annotated[int, Field(ge=0)] = 1
    origin_utc: AwareDatetime
    single_slit_rate_hz: Annotated[float, Field(gt=0, le=1e12)]
    background_rate_hz: _Rate = 0.0
    dark_rate_hz: _Rate = 0.0
    dead_time_s: _Small = 0.0
    dead_time_kind: Literal["non-paralysable", "paralysable"] = "non-paralysable"
    readout_s: Annotated[float, Field(ge=0, le=3600)] = 0.0
    source: SourceSettings = SourceSettings()
    instruments: Mapping[str, Model] = {}


def read_settings(rig: Rig) -> Settings:
    """Return the table [bench] of a rig.

    Raises
    ------
    DescriptionError
        With every problem of the table at once, and for a rig without one.
    """
    if rig.bench is None:
        raise DescriptionError((f"rig {rig.name}: it has no table [bench]. Add one to simulate it.",))
    try:
        return Settings.model_validate(rig.bench)
    except ValidationError as error:
        raise DescriptionError(
            every_problem(error, Settings, rig.bench, f"rig {rig.name}, [bench]")
        ) from error


def utc_ns(moment: datetime) -> int:
    """Return a moment as nanoseconds since 1970-01-01 UTC, exact to the microsecond."""
    whole = int(moment.replace(microsecond=0).timestamp())
    return whole * 1_000_000_000 + moment.microsecond * 1000
