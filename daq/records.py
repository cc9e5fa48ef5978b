"""Records: what is planned (`Visit`), what came home (`Reading`), and the table of quality bits."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from enum import IntFlag

UNPLANNED = -1


class Quality(IntFlag):
    """What a visit's own record says about it, frozen when it is committed (CF-like flag masks)."""

    GOOD = 0
    OWN_LIVE_TIME = 1  # the counter's own live time, not the gate width
    OVERFLOW = 2  # the counter says that it overflowed or saturated
    OFF_TARGET = 4  # an encoder disagreed with the target when the gate opened or closed
    MOVED = 8  # an encoder moved while the gate was open
    DISPERSION = 16  # the slices scatter more than counting allows
    GATE_TIME = 32  # live time differs from the planned dwell
    SENSOR = 64  # a sensor was out of its band
    CLOCK_STEP = 128  # UTC jumped against the run clock
    NO_COUNTS = 256  # nothing where much was expected
    FINGERPRINT = 512  # the stand's eight counts do not fit the earlier stands here
    MONITOR = 1024  # the monitor ratio left its band
    DARK = 2048  # beam off: detector noise
    FLANK = 4096  # a visit on the flank of an opening
    RATE = 8192  # the stand's counts left the band about those of the first stand here


# A stand with one of these in any visit is left out of the sums, whole.
EXCLUDING = (
    Quality.OVERFLOW
    | Quality.OFF_TARGET
    | Quality.MOVED
    | Quality.DISPERSION
    | Quality.SENSOR
    | Quality.NO_COUNTS
    | Quality.FINGERPRINT
    | Quality.DARK
    | Quality.FLANK
)


@dataclass(frozen=True, slots=True)
class Visit:
    """A planned visit: show this opening, go to this position, count this long.

    `number` is its place in the itinerary (-1: unplanned), `opening` a bit mask, `start_s` the planned
    opening of the gate since the start of the run; `forward` is the coin of its pair; `pause_s` is waited
    before the gate opens, besides the moves.
    """

    number: int
    opening: int
    position_mm: float
    dwell_s: float
    start_s: float = 0.0
    stand: int = -1
    lap: int = -1
    pair: int = -1
    forward: bool = True
    pause_s: float = 0.0


@dataclass(frozen=True, slots=True)
class Reading:
    """What came home from one visit.

    `gate_open_ns`, `gate_close_ns` on the run clock, `utc_ns` at the opening of the gate; `values` by
    channel (counts, or power); `encoder_mm` axis -> (open, close); `sensors` name -> (value, unit, at_ns);
    `slices` slice -> channel -> counts; `attempt` counts tries of the stand from 1. `live_s` is never
    corrected for dead time.
    """

    visit: int
    attempt: int
    opening: int
    position_mm: float
    dwell_s: float
    gate_open_ns: int
    gate_close_ns: int
    utc_ns: int
    live_s: float
    values: tuple[float, ...]
    values_var: tuple[float, ...] | None = None
    repeats: int = 1
    slices: tuple[tuple[int, ...], ...] | None = None
    encoder_mm: Mapping[str, tuple[float, float]] = field(default_factory=dict)
    sensors: Mapping[str, tuple[float, str, int]] = field(default_factory=dict)
    quality: Quality = Quality.GOOD
    reason: int = 0
    events: bytes | None = None


# What a person may say of a finished run.
VERDICTS = ("counts", "counts in part", "doubtful", "does not count")

# What can be measured at the bench, in the order of a day.
TASKS = (
    *("plateau", "dark", "deadtime", "pilot", "register", "backlash"),
    *("scale", "settle", "crosstalk", "monitor", "dry-lap"),
)

# What a person may do on the page: a watcher reads, an operator also asks.
ROLES = ("watcher", "operator")

# Reasons are ids in the archive; their words stand here and in the archive's attributes.
REASONS: Mapping[int, str] = {
    0: "planned",
    1: "stand repeated after an interruption of the program",
    2: "stand repeated after a device fault",
    3: "stand repeated by a quality rule",
    4: "unplanned dark visit",
    5: "unplanned flank visit",
    6: "visit of a bench task",
    7: "unplanned visit behind shut slits",
}
DARK_VISIT, FLANK_VISIT, BENCH_VISIT, CLOSED_VISIT = 4, 5, 6, 7
