"""Ports: what the sequencer asks of the world, and nothing about how it is done."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Protocol

from daq.records import Reading


class Connection(Protocol):
    """A byte stream to a device, as a clock's `connect` gives it; socket-like."""

    def send(self, data: bytes) -> None:
        """Send all bytes; raises OSError when the peer is gone."""

    def recv(self, most: int) -> bytes:
        """Return what is waiting without blocking, at most `most` bytes; b"" when the peer has closed.

        Raises
        ------
        BlockingIOError
            When nothing is waiting.
        """

    def close(self) -> None:
        """Let the stream go."""


class Signal(Protocol):
    """A flag that another thread raises; waiting for it passes time on the clock it came from."""

    def set(self) -> None:
        """Raise the flag and wake whoever waits."""

    def clear(self) -> None:
        """Lower the flag."""

    def is_set(self) -> bool:
        """Return whether the flag is up."""

    def wait_until(self, at_ns: int) -> bool:
        """Wait for the flag, at most until a time on the run clock; return whether it is up."""


class Clock(Protocol):
    """The run clock, integer nanoseconds; `kind` is "real" or "virtual"."""

    kind: str

    def now_ns(self) -> int:
        """Return the run time, never stepped."""

    def utc_ns(self) -> int:
        """Return UTC as nanoseconds since 1970-01-01, a stamp only: durations come from `now_ns`."""

    def sleep_until(self, at_ns: int) -> None:
        """Return when the run time has reached `at_ns`."""

    def event(self) -> Signal:
        """Return a new flag on this clock."""

    def call_at(self, at_ns: int, function: Callable[[], None]) -> None:
        """Call a short function once when the run time reaches `at_ns`."""

    def wait_readable(self, connection: Connection, until_ns: int) -> bool:
        """Wait until bytes (or the end of the stream) can be read, at most until `until_ns`."""

    def connect(self, address: str, timeout_s: float) -> Connection:
        """Open a byte stream to "tcp://host:port"; raises OSError when nobody answers."""


@dataclass(frozen=True, slots=True)
class AxisState:
    """Where an axis says it is: commanded and encoder position [mm], and what it is doing."""

    position_mm: float
    encoder_mm: float
    moving: bool
    homed: bool
    alarm: str = ""


class Device(Protocol):
    """What every device has: a name from the rig, an identity asked of it after every opening."""

    name: str

    def open(self) -> None:
        """Open the link, ask the identity, send the settings; raises DeviceError."""

    def close(self) -> None:
        """Let the link go; never raises."""

    def identity(self) -> str:
        """Return the identity reply, verbatim."""


class Stage(Device, Protocol):
    """One linear axis."""

    limits_mm: tuple[float, float]

    def home(self) -> None:
        """Find the reference; returns when the axis says that it is homed."""

    def start(self, position_mm: float) -> float:
        """Start a move and return how long it will take, settling included [s].

        Raises
        ------
        DeviceError
            For a target that is not finite or lies outside the limits: nothing is sent then.
        """

    def state(self) -> AxisState:
        """Return where the axis is; raises DeviceError on an alarm of the link."""

    def stop_now(self) -> None:
        """Send the stop past everything else, from any thread."""


class Mask(Protocol):
    """What shows an opening: a translator with separate cuts, or a blocker for each slit."""

    def show(self, opening: int) -> float:
        """Start showing an opening (bit mask) and return how long it will take [s]."""

    def state(self) -> Mapping[str, AxisState]:
        """Return the state of every axis of the mask by its name."""

    def target_mm(self, opening: int) -> Mapping[str, float]:
        """Return where every axis of the mask stands when an opening is shown."""

    def stop_now(self) -> None:
        """Stop every axis of the mask, from any thread."""


@dataclass(frozen=True, slots=True)
class Counted:
    """The counter's part of a Reading.

    `events` of list mode: little-endian uint64, ticks since the gate opened times channels, plus channel.
    """

    values: tuple[float, ...]
    live_s: float
    overflow: bool = False
    own_live_time: bool = False
    values_var: tuple[float, ...] | None = None
    repeats: int = 1
    slices: tuple[tuple[int, ...], ...] | None = None
    events: bytes | None = None


class Counter(Device, Protocol):
    """A gated counter."""

    def arm(self, dwell_s: float) -> None:
        """Open the gate now for a dwell; returns once the counter has accepted."""

    def busy(self) -> bool:
        """Return whether the gate is still open."""

    def read(self) -> Counted:
        """Return what the last gate counted; raises DeviceError when that is in doubt."""

    def abort(self) -> None:
        """Close the gate and forget what it counted."""


class Sensor(Device, Protocol):
    """One or more quantities that are read beside the counts, every `every_s` of run time."""

    every_s: float

    def read(self) -> Mapping[str, tuple[float, str]]:
        """Return name -> (value, unit)."""


class Shutter(Device, Protocol):
    """Blocks the beam on request (no safety function).

    Attributes
    ----------
    armed
        Whether it may let the beam pass: somebody is there, or has armed the run.
    """

    armed: bool

    def block(self) -> None:
        """Block the beam."""

    def unblock(self) -> None:
        """Let the beam pass; only when armed or by hand."""

    def state(self) -> str:
        """Return "blocked", "open" or "moving"."""


class Sink(Protocol):
    """Where readings go; a row number is given back only when the reading is durable."""

    def append_events(self, chunk: bytes) -> None:
        """Take a chunk of list-mode events of the visit that is being counted."""

    def commit(self, reading: Reading) -> int:
        """Make a reading durable and return its row number; raises StorageError and keeps nothing else."""

    def stands_done(self) -> Mapping[int, int]:
        """Return stand -> tries so far, for every stand with at least one reading."""


@dataclass(frozen=True, slots=True)
class Devices:
    """The devices of one rig, opened; `tolerance_mm` by axis, encoder against target."""

    mask: Mask
    detector: Stage
    counter: Counter
    sensors: Sequence[Sensor] = ()
    shutter: Shutter | None = None
    stages: Sequence[Stage] = ()
    all: Sequence[Device] = ()
    tolerance_mm: Mapping[str, float] = field(default_factory=dict)


class Bench(Protocol):
    """A simulated bench: one truth behind all devices of a rig, and the clock that moves it."""

    clock: Clock

    def true_rates_hz(
        self, openings: Sequence[int], positions_mm: Sequence[float]
    ) -> Sequence[Sequence[float]]:
        """Return noise-free rates, position by opening, without drift and dead time [1/s]."""

    def free_bytes(self) -> float:
        """Return how much room is left on the disk as far as the bench has a say, else infinity."""

    def turn(self, knob: str, value: float) -> None:
        """Set a knob of the bench, as a person would at a real one."""

    def keep(self) -> bytes:
        """Return what a resumed rehearsal needs: axis positions and clock offset, as JSON."""

    def close(self) -> None:
        """Stop the hosts and let their ports go."""
