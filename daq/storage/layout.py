"""The one table of columns: what an archive holds, in which type and unit, and what missing looks like."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from math import prod
from typing import Any

from daq.openings import LETTERS
from daq.records import REASONS, Quality

FORMAT = 1  # version of the archive; a reader refuses a newer one
EVENT_CHUNK = 1 << 20
EVENTS = "event_gap"
ZARR = "run.zarr"
ITINERARY = "itinerary"
RECORD = "record.json"  # what the run is, kept a second time: one lost file must not cost a run its meaning
FINISHED = "finished"  # attribute of a run that is whole; it counts only when the journal is gone
CHUNK = 4096  # visits sealed at once (storage.md section 4: 16384 stalls a commit four times longer)


@dataclass(frozen=True, slots=True)
class Column:
    """One array of the archive: `kind` "int64", "int32" or "float64", `shape` of the entry of one row.

    Missing is -1 in a whole-number column and NaN in a real one, so that nothing missing reads as a count,
    an opening or a position.
    """

    name: str
    kind: str
    units: str
    long_name: str
    dims: tuple[str, ...] = ("row",)
    shape: tuple[int, ...] = ()
    attributes: Mapping[str, Any] = field(default_factory=dict)

    @property
    def fill(self) -> float:
        """What a missing entry reads as."""
        return float("nan") if self.kind == "float64" else -1

    @property
    def width(self) -> int:
        """How many numbers stand in one row."""
        return prod(self.shape)


def columns(meta: Mapping[str, Any]) -> tuple[Column, ...]:
    """Return the columns that are measured, in the order of a journal row."""
    slits = int(meta["slits"])
    return (
        Column("visit", "int64", "1", "planned number of the visit, -1: unplanned"),
        Column("attempt", "int64", "1", "try of the stand, from 1"),
        Column("opening", "int64", "1", "slits open together", attributes=_opening_flags(slits)),
        Column("position_mm", "float64", "mm", "detector position asked for"),
        Column("dwell_s", "float64", "s", "counting time asked for"),
        Column("gate_open_ns", "int64", "ns", "run clock when the gate opened"),
        Column("gate_close_ns", "int64", "ns", "run clock when the gate closed"),
        Column("utc_ns", "int64", "ns", "UTC when the gate opened, since 1970-01-01T00:00:00Z"),
        Column("live_s", "float64", "s", "counting time obtained, not corrected for dead time"),
        Column("repeats", "int64", "1", "readings that were added up"),
        Column("quality", "int64", "1", "quality bits, frozen at commit", attributes=_quality_flags()),
        Column("reason", "int64", "1", "why the visit was made", attributes=_reason_flags()),
        *_value_columns(meta),
        *_encoder_columns(meta.get("axes", ())),
        *_sensor_columns(meta.get("sensors", {})),
        *_event_columns(meta),
    )


def looked_up() -> tuple[Column, ...]:
    """Return the columns that follow from visits and itinerary; written when the run is finished."""
    return (
        Column("stand", "int64", "1", "stand of the visit, -1: unplanned"),
        Column("lap", "int64", "1", "sweep over all positions, -1: unplanned"),
        Column("pair", "int64", "1", "a lap and its mirror, -1: in no complete pair or unplanned"),
        Column("forward", "int64", "1", "coin of the pair, -1: unplanned", attributes=_yes_no()),
        Column("use", "int64", "1", "whether the estimate takes the visit's stand", attributes=_yes_no()),
    )


def planned(slits: int, signs: Mapping[str, Any]) -> tuple[Column, ...]:
    """Return the columns of the group `itinerary/`: by planned visit, and by detector position."""
    by_visit, by_position = ("planned",), ("position",)
    return (
        Column("opening", "int64", "1", "slits open together", by_visit, attributes=_opening_flags(slits)),
        Column("position_mm", "float64", "mm", "detector position", by_visit),
        Column("start_s", "float64", "s", "planned opening of the gate since the start", by_visit),
        Column("dwell_s", "float64", "s", "planned counting time", by_visit),
        Column("stand", "int64", "1", "all openings at one position", by_visit),
        Column("lap", "int64", "1", "sweep over all positions", by_visit),
        Column("pair", "int64", "1", "a lap and its mirror, -1: in no complete pair", by_visit),
        Column("forward", "int64", "1", "coin of the pair", by_visit, attributes=_yes_no()),
        Column("positions_mm", "float64", "mm", "detector positions", by_position),
        Column("weights", "float64", "1", "weight of the position in the residual", by_position),
        *(
            Column(f"sign_{term}", "float64", "1", f"planned sign of the pairwise term {term}", by_position)
            for term in signs
        ),
    )


def _value_columns(meta: Mapping[str, Any]) -> tuple[Column, ...]:
    counted, channels = meta["counting"] == "counts", int(meta["channels"])
    kind, units = ("int64", "count") if counted else ("float64", str(meta.get("values_unit", "W")))
    dims, slices = ("row", "channel"), int(meta.get("slices", 0))
    several = (channels,)
    found = (
        Column("values", kind, units, "what was counted, or the power that was read", dims, several),
        Column("values_var", "float64", f"{units}2", "variance of values, if known", dims, several),
    )
    if not slices:
        return found
    words = "what was counted in equal parts of the gate"
    return (*found, Column("slices", kind, units, words, ("row", "slice", "channel"), (slices, channels)))


def list_mode(meta: Mapping[str, Any], longest_s: float) -> dict[str, Any]:
    """Return the settings of list mode for a run whose meta data ask for it (`tick_s`), else nothing.

    The time between two events is kept in 32 bits where the longest dwell fits in there.
    """
    if not meta.get("list_mode"):
        return {}
    fits = longest_s / meta["list_mode"]["tick_s"] < 2**31
    return {"list_mode": {"kind": "int32" if fits else "int64", "chunk": EVENT_CHUNK, **meta["list_mode"]}}


def events(meta: Mapping[str, Any]) -> Column:
    """Return the column of list mode: the time from one event to the next, from the gate's opening on."""
    mode = meta["list_mode"]
    words = "time since the event before it, or since the gate opened"
    channels = int(mode.get("channels", 1))
    told = {
        "channels": channels,
        "comment": "channel: remainder of the time since the gate opened by channels",
    }
    return Column(
        EVENTS,
        mode["kind"],
        f"{mode['tick_s']:g} s",
        words,
        ("event",),
        attributes=told if channels > 1 else {},
    )


def _event_columns(meta: Mapping[str, Any]) -> tuple[Column, ...]:
    if not meta.get("list_mode"):
        return ()
    return (
        Column("event_start", "int64", "1", "index of the visit's first event"),
        Column("event_count", "int64", "1", "events of the visit"),
    )


def _encoder_columns(axes: tuple[str, ...]) -> tuple[Column, ...]:
    return tuple(
        Column(f"encoder_{axis}_{edge}_mm", "float64", "mm", f"encoder of {axis} at gate {edge}")
        for axis in axes
        for edge in ("open", "close")
    )


def _sensor_columns(sensors: Mapping[str, str]) -> tuple[Column, ...]:
    return tuple(
        column
        for name, unit in sensors.items()
        for column in (
            Column(f"sensor_{name}", "float64", unit or "1", f"last reading of {name}"),
            Column(f"sensor_{name}_at_ns", "int64", "ns", f"run clock of that reading of {name}"),
        )
    )


def _opening_flags(slits: int) -> dict[str, Any]:
    return {"flag_masks": [1 << bit for bit in range(slits)], "flag_meanings": " ".join(LETTERS[:slits])}


def _quality_flags() -> dict[str, Any]:
    bits = [bit for bit in Quality if bit]
    return {
        "flag_masks": [int(bit) for bit in bits],
        "flag_meanings": " ".join(str(bit.name).lower() for bit in bits),
    }


def _reason_flags() -> dict[str, Any]:
    words = [text.replace(" ", "_") for text in REASONS.values()]
    return {"flag_values": list(REASONS), "flag_meanings": " ".join(words)}


def _yes_no() -> dict[str, Any]:
    return {"flag_values": [0, 1], "flag_meanings": "no yes"}
