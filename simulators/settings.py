"""Settings: the table [bench] of a rig file, which only the simulators read."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from datetime import datetime
from typing import Annotated, Literal

from pydantic import AwareDatetime, Field, ValidationError, model_validator

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
    "scpi-power",
    "gauge",
    "shutter",
]


class SourceSettings(Table):
    """How the source drifts, relative; the kinds multiply. `levels`: (run time [s], strength) in order."""

    linear_per_hour: float = 0.0
    random_walk_per_sqrt_hour: Annotated[float, Field(ge=0, le=10)] = 0.0
    levels: tuple[tuple[float, Annotated[float, Field(ge=0)]], ...] = ()


class ChannelSettings(Table):
    """What a channel of the counter sees.

    "detector": `share` of the light behind the mask, and dark counts; "monitor": `rate_hz` times the strength
    of the source, before mask and shutter, and by the share `bends` more at `rate_hz`; "coincidence": `share`
    of the light whose twin was seen too, and accidental ones of channels 1 and 2 within `window_s`. `fano`:
    variance over mean of what it counts.
    """

    sees: Literal["detector", "monitor", "coincidence"] = "detector"
    share: Annotated[float, Field(ge=0, le=1)] = 1.0
    rate_hz: _Rate = 0.0
    window_s: _Small = 0.0
    fano: Annotated[float, Field(ge=1, le=1e6)] = 1.0
    bends: Annotated[float, Field(ge=-0.5, le=0.5)] = 0.0


class PowerSettings(Table):
    """How a power meter reads: noise of one reading, and readings a second."""

    noise: _Rate = 0.0
    readings_per_s: Annotated[float, Field(gt=0, le=1e6)] = 10.0


class LightSettings(Table):
    """What the light does besides diffraction, by slit or pair of slits.

    `amplitude` and `phase_rad` of each slit's illumination; `visibility` of each pair; `loop` and
    `loop_phase_rad`: relative amplitude and phase of a wave that creeps along the mask from slit to slit,
    once for each pair of open slits; `cut_sigma` draws the true slits about the described ones, by so many of
    their stated uncertainties.
    """

    amplitude: Mapping[str, Annotated[float, Field(gt=0, le=10)]] = {}
    phase_rad: Mapping[str, float] = {}
    visibility: Mapping[str, Annotated[float, Field(ge=0, le=1)]] = {}
    loop: Annotated[float, Field(ge=0, le=1)] = 0.0
    loop_phase_rad: float = 0.0
    cut_sigma: Annotated[float, Field(ge=0, le=10)] = 0.0


class ChipSettings(Table):
    """The mask as it truly is, and how its stage stands.

    Windows of `window_mm` (0: an opening is shown within its tolerance), edges blurred by `edge_mm`, off the
    drawing by `offset_mm` altogether and by `off_mm` each; put in `mirrored`, or with windows `missing`. The
    stage stands off its encoder by half of `backlash_mm` along its last move, by `repeat_mm` at random; after
    a move the light is off by the share `transient`, which fades in `transient_s`.
    """

    window_mm: Annotated[float, Field(ge=0, le=100)] = 0.0
    edge_mm: Annotated[float, Field(gt=0, le=10)] = 0.03
    offset_mm: float = 0.0
    off_mm: Mapping[str, float] = {}
    mirrored: bool = False
    missing: tuple[str, ...] = ()
    backlash_mm: Annotated[float, Field(ge=0, le=1)] = 0.0
    repeat_mm: Annotated[float, Field(ge=0, le=1)] = 0.0
    transient: Annotated[float, Field(gt=-1, le=1)] = 0.0
    transient_s: Annotated[float, Field(gt=0, le=60)] = 0.1


class DialSettings(Table):
    """How the detector answers to what a person sets on it (`[by_hand]`), in the dial's own unit.

    Where it stands `now` all is as described; half of the pulses are lost at `knee`, blurred by `blur`, above
    it rates rise by the share `slope` for one unit, and dark counts e-fold in `dark_e`. Each count a second
    takes `sag` off what is set.
    """

    now: float = 0.0
    knee: float = -1e6
    blur: Annotated[float, Field(gt=0)] = 1.0
    slope: float = 0.0
    dark_e: Annotated[float, Field(gt=0)] = 1e6
    sag: Annotated[float, Field(ge=0)] = 0.0


class Settings(Table):
    """The simulated truth.

    Of a rate of events the share `sag_s` times that rate never reaches the threshold of the detector: pulses
    that sag, which between two counts nobody sees. A gate also sees the share `memory` of the light of the
    gate before it.
    """

    model: Literal["wavelets"]
    seed: Annotated[int, Field(ge=0)] = 1
    origin_utc: AwareDatetime
    single_slit_rate_hz: Annotated[float, Field(gt=0, le=1e12)]
    background_rate_hz: _Rate = 0.0
    dark_rate_hz: _Rate = 0.0
    dead_time_s: _Small = 0.0
    dead_time_kind: Literal["non-paralysable", "paralysable"] = "non-paralysable"
    sag_s: _Small = 0.0
    readout_s: Annotated[float, Field(ge=0, le=3600)] = 0.0
    source: SourceSettings = SourceSettings()
    channels: Annotated[Sequence[ChannelSettings], Field(min_length=1)] = (ChannelSettings(),)
    power: PowerSettings = PowerSettings()
    light: LightSettings = LightSettings()
    chip: ChipSettings = ChipSettings()
    detector: DialSettings = DialSettings()
    room_light_hz: _Rate = 0.0
    memory: Annotated[float, Field(ge=0, lt=1)] = 0.0
    instruments: Mapping[str, Model] = {}

    @model_validator(mode="after")
    def _channels_fit(self) -> Settings:
        pairs = [place for place, one in enumerate(self.channels) if one.sees == "coincidence"]
        if pairs and (pairs != [0] or len(self.channels) < 3):
            raise ValueError("channel 0 alone sees coincidences, those of channels 1 and 2")
        if self.dead_time_s and any(one.fano > 1 for one in self.channels):
            raise ValueError("a channel of bunched counts has no dead time here")
        return self


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
