"""The rig: slits, mask, axes, devices, and the limits that no move may leave."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Annotated, Any, Literal

from pydantic import Field, field_validator, model_validator

from daq import openings
from daq.description.address import same_place
from daq.description.by_hand import ByHand
from daq.description.device import DeviceEntry
from daq.description.problems import NotNegative, Positive, ProblemsError, Table

SlitLetter = Literal["A", "B", "C", "D", "E"]


class Geometry(Table):
    """Wavelength (or de Broglie wavelength) and distance from mask to detector."""

    wavelength_m: Positive
    distance_m: Positive


WIDEST_M, FARTHEST = 10.0, 10_000  # beyond, a length was written in another unit


class Slit(Table):
    """One slit instance: where it was cut and how wide, with the uncertainties of its metrology."""

    centre_m: float
    width_m: Positive
    centre_u_m: NotNegative = 0.0
    width_u_m: NotNegative = 0.0

    @model_validator(mode="after")
    def _in_metres(self) -> Slit:
        """Refuse lengths that can only be meant in another unit."""
        metres = "Lengths here are in metres: 80 nm is 80e-9"
        if self.width_m > WIDEST_M:
            raise ValueError(f"a slit {self.width_m:g} m wide fits on no mask. {metres}")
        if abs(self.centre_m) > FARTHEST * self.width_m:
            raise ValueError(
                f"a centre at {self.centre_m:g} m is too far off for a width of {self.width_m:g} m. {metres}"
            )
        for key, known in (("centre_u_m", self.centre_u_m), ("width_u_m", self.width_u_m)):
            if known > self.width_m:
                raise ValueError(f"{key} {known:g} m is more than the width {self.width_m:g} m. {metres}")
        return self


class Shown(Table):
    """An opening on the mask: where the translator stands, and slits that were cut apart for it."""

    at_mm: float
    cuts: Mapping[SlitLetter, Slit] = {}


class Mask(Table):
    """A mask translator with separate openings.

    `window_mm`: how wide every window is drawn; `key_mm`: where a window stands that no opening uses, and by
    which it is seen which way round the chip is.
    """

    axis: str
    chip: str = ""
    window_mm: Positive | None = None
    key_mm: float | None = None
    openings: Mapping[str, Shown]

    @field_validator("openings")
    @classmethod
    def _named_in_order(cls, value: Mapping[str, Shown]) -> Mapping[str, Shown]:
        for name in value:
            openings.mask(name)
        return value


class Detector(Table):
    """What carries the detector."""

    axis: str


class Axis(Table):
    """One linear axis of a stage controller."""

    device: str
    letter: Annotated[str, Field(pattern="^[A-Z]$")]
    limits_mm: tuple[float, float]
    speed_mm_s: Positive
    settle_s: NotNegative = 0.0
    approach: Literal["either", "up", "down"] = "either"
    takeup_s: NotNegative = 0.0
    tolerance_mm: Positive = 0.01

    @field_validator("limits_mm")
    @classmethod
    def _rising(cls, value: tuple[float, float]) -> tuple[float, float]:
        if not value[0] < value[1]:
            raise ValueError("the lower limit must lie below the upper one")
        return value

    @model_validator(mode="after")
    def _take_up_has_a_direction(self) -> Axis:
        if self.takeup_s and self.approach == "either":
            raise ValueError("takeup_s needs approach 'up' or 'down': the direction that needs no take-up")
        return self

    def move_s(self, distance_mm: float) -> float:
        """Return how long a move takes, settling included [s]; none takes no time.

        A move along `approach` waits as long as one against it, which takes up the play of the axis: moves
        that are as long in both directions let a linear drift cancel.
        """
        if not distance_mm:
            return 0.0
        return self.settle_s + abs(distance_mm) / self.speed_mm_s + self.takeup_s


def _what_remains(have: Mapping[str, Shown], wanted: set[str]) -> str:
    """Return which interference terms a mask without all openings can still give, as words."""
    masks = {openings.mask(name) for name in have}
    terms = [
        name
        for name in sorted(wanted, key=openings.mask)
        if openings.mask(name).bit_count() >= 2
        and all(sub in masks for sub in range(openings.mask(name) + 1) if not sub & ~openings.mask(name))
    ]
    return f"Terms that remain: {', '.join(terms)}" if terms else "No interference term remains"


class Rig(Table):
    """The hardware of a bench as its rig file describes it."""

    schema_: Literal[1] = Field(alias="schema")
    name: Annotated[str, Field(pattern="^[a-z0-9][a-z0-9-]*$")]
    geometry: Geometry
    slits: Mapping[SlitLetter, Slit]
    mask: Mask
    detector: Detector
    axes: Mapping[str, Axis]
    devices: Mapping[str, DeviceEntry]
    by_hand: ByHand = ByHand()
    bench: Mapping[str, Any] | None = None

    @model_validator(mode="after")
    def _hangs_together(self) -> Rig:
        found = [
            *self._slit_problems(),
            *self._axis_problems(),
            *self._opening_problems(),
            *self._dialect_problems(),
            *same_place({name: entry.address for name, entry in self.devices.items()}),
            *same_place({f"{name}.stream": one.stream for name, one in self.devices.items() if one.stream}),
        ]
        if found:
            raise ProblemsError(found)
        return self

    def _slit_problems(self) -> Iterator[tuple[str, str]]:
        letters = "".join(self.slits)
        if not 2 <= len(letters) <= 5 or letters != openings.LETTERS[: len(letters)]:
            yield "slits", f"a mask has two to five slits named A, B, C ... in order, not {letters or 'none'}"

    def _axis_problems(self) -> Iterator[tuple[str, str]]:
        for key, axis in (("mask.axis", self.mask.axis), ("detector.axis", self.detector.axis)):
            if axis not in self.axes:
                yield key, f"there is no axis {axis!r} in [axes]. Name one of {', '.join(self.axes)}"
        for name, entry in self.axes.items():
            if entry.device not in self.devices:
                yield (
                    f"axes.{name}.device",
                    f"no device {entry.device!r} in [devices]. Name one of {', '.join(self.devices)}",
                )

    def _dialect_problems(self) -> Iterator[tuple[str, str]]:
        for name, device in self.devices.items():
            if device.slices and device.dialect is not None and not device.dialect.gives_slices:
                yield (
                    f"devices.{name}.slices",
                    f"dialect {device.dialect.name!r} has no group 'slices' in command.fetch.reply",
                )
        for name, axis in self.axes.items():
            entry = self.devices.get(axis.device)
            if entry is None or entry.dialect is None:
                continue
            words = entry.dialect.axis_words
            step_mm = 10.0**-words.decimals / words.device_per_mm
            if axis.tolerance_mm < step_mm / 2:
                yield (
                    f"axes.{name}.tolerance_mm",
                    f"{axis.tolerance_mm:g} mm is finer than what dialect {entry.dialect.name!r} can send, "
                    f"steps of {step_mm:g} mm",
                )

    def _opening_problems(self) -> Iterator[tuple[str, str]]:
        places: dict[float, str] = {}
        wanted = set(openings.names(len(self.slits))) if 2 <= len(self.slits) <= 5 else set()
        missing = sorted(wanted - set(self.mask.openings), key=openings.mask)
        if missing:
            yield (
                "mask.openings",
                f"the mask lacks {', '.join(missing)}; the residual needs every opening once. "
                + _what_remains(self.mask.openings, wanted),
            )
        for name, shown in self.mask.openings.items():
            yield from self._shown_problems(name, shown)
            if shown.at_mm in places:
                yield f"mask.openings.{name}.at_mm", f"{places[shown.at_mm]} stands at {shown.at_mm:g} mm too"
            places[shown.at_mm] = name

    def _shown_problems(self, name: str, shown: Shown) -> Iterator[tuple[str, str]]:
        key = f"mask.openings.{name}"
        letters = set(name) if name != openings.NONE else set()
        for foreign in sorted(letters - set(self.slits)):
            yield key, f"there is no slit {foreign} in [slits]"
        for odd in sorted(set(shown.cuts) - letters):
            yield f"{key}.cuts", f"slit {odd} is not open there"
        axis = self.axes.get(self.mask.axis)
        if axis and not axis.limits_mm[0] <= shown.at_mm <= axis.limits_mm[1]:
            low, high = axis.limits_mm
            yield (
                f"{key}.at_mm",
                f"{shown.at_mm:g} lies outside the limits {low:g} .. {high:g} mm of axis {self.mask.axis!r}",
            )

    @property
    def simulated(self) -> bool:
        """Whether every device of this rig is simulated."""
        return self.bench is not None

    @property
    def opening_masks(self) -> tuple[int, ...]:
        """The openings that the mask has, as bit masks in binary order."""
        return tuple(sorted(openings.mask(name) for name in self.mask.openings))

    def slits_of(self, opening: int) -> Mapping[str, Slit]:
        """Return the slit instances that an opening shows: its own cuts, else those of [slits]."""
        name = openings.name(opening)
        cuts = self.mask.openings[name].cuts if name in self.mask.openings else {}
        shown = () if opening == 0 else tuple(name)
        return {letter: cuts.get(letter, slit) for letter, slit in self.slits.items() if letter in shown}

    def mask_at_mm(self, opening: int) -> float:
        """Return where the mask translator stands for an opening [mm]."""
        return self.mask.openings[openings.name(opening)].at_mm

    def mask_move_s(self) -> dict[tuple[int, int], float]:
        """Return the matrix of move times between openings, (from, to) -> seconds, settling included."""
        axis = self.axes[self.mask.axis]
        every = self.opening_masks
        return {
            (here, there): axis.move_s(self.mask_at_mm(there) - self.mask_at_mm(here))
            for here in every
            for there in every
        }

    @property
    def readout_s(self) -> float:
        """The longest readout of a device between two gates [s]."""
        return max((entry.readout_s for entry in self.devices.values()), default=0.0)

    @property
    def slices(self) -> int:
        """Into how many equal parts the counter divides a gate, 0 when it does not."""
        return max((entry.slices for entry in self.devices.values()), default=0)

    @property
    def list_mode(self) -> Mapping[str, float] | None:
        """Unit of the event times [s] and channels of a counter in list mode, None without one."""
        found = [entry for entry in self.devices.values() if entry.stream is not None]
        return (
            {"tick_s": found[0].tick_s / found[0].channels, "channels": found[0].channels} if found else None
        )

    @property
    def shortest_gate_s(self) -> float:
        """The shortest gate that every device can make [s]."""
        return max((entry.shortest_gate_s for entry in self.devices.values()), default=0.0)

    def detector_move_s(self, distance_mm: float) -> float:
        """Return how long a detector move takes, settling included [s]."""
        return self.axes[self.detector.axis].move_s(distance_mm)
