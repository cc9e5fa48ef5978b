"""Bench: the instruments of a rig around one truth, on a virtual clock or on their own."""

from __future__ import annotations

import json
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, Literal

from daq.description import Rig
from daq.errors import DescriptionError
from daq.ports import Clock
from simulators.clock import VirtualClock
from simulators.counters import GatedCounter
from simulators.faults import Struck, read_script
from simulators.hosts import Host, Instrument, serve
from simulators.listmode import EventStream
from simulators.models import Parts, misfits
from simulators.motion import Track
from simulators.settings import Settings, read_settings, utc_ns
from simulators.truth import Truth
from simulators.upsets import Spoilt, Upsets

_FOUND_AT = 0.37  # where on its travel an axis is found when it is switched on


@dataclass(frozen=True, slots=True)
class Built:
    """The instruments of a rig by device name, and the truth that they share."""

    instruments: Mapping[str, Instrument]
    tracks: Mapping[str, Track]
    truth: Truth
    upsets: Upsets | None = None
    streams: Mapping[str, Instrument] = field(default_factory=dict)

    def served(self, rig: Rig, clock: Clock) -> Mapping[str, tuple[str, Instrument]]:
        """Return address and instrument, as hosts serve it, by name; replies may be spoilt by upsets."""
        spoilt = {
            name: one if self.upsets is None else Spoilt(name, one, self.upsets, clock)
            for name, one in self.instruments.items()
        }
        return {
            **{name: (rig.devices[name].address, one) for name, one in spoilt.items()},
            **{f"{name}.stream": (str(rig.devices[name].stream), one) for name, one in self.streams.items()},
        }


class WaveletBench:
    """A simulated bench on its own virtual clock; implements `daq.ports.Bench`."""

    def __init__(self, clock: VirtualClock, built: Built, hosts: Sequence[Host]) -> None:
        self.clock = clock
        self._built, self._hosts = built, hosts

    def true_rates_hz(
        self, openings: Sequence[int], positions_mm: Sequence[float]
    ) -> Sequence[Sequence[float]]:
        """Return noise-free rates, position by opening, without drift and dead time [1/s]."""
        rates: list[list[float]] = self._built.truth.rates_hz(openings, positions_mm).tolist()
        return rates

    def truth_mm(self, axis: str, at_ns: int | None = None) -> float:
        """Return where an axis truly is, or was [mm], whatever its encoder says."""
        return self._built.tracks[axis].true_mm(self.clock.now_ns() if at_ns is None else at_ns)

    def struck(self) -> Sequence[Struck]:
        """Return the faults that were injected, the truth behind what the run noticed."""
        upsets = self._built.upsets
        return list(upsets.faults.struck) if upsets and upsets.faults else []

    def free_bytes(self) -> float:
        """Return how much is left on a disk that a fault fills, infinite while none does."""
        return self._built.upsets.free_bytes() if self._built.upsets else float("inf")

    def turn(self, knob: str, value: float) -> None:
        """Set a knob, as a person would at a real bench; a fresh bench has all as described."""
        self._built.truth.knobs.turn(knob, value)

    def keep(self) -> bytes:
        """Return what a resumed rehearsal needs: axis positions and clock offset, as JSON."""
        now_ns = self.clock.now_ns()
        axes = {
            name: {"place_mm": track.true_mm(now_ns), "homed": track.homed(now_ns)}
            for name, track in self._built.tracks.items()
        }
        return json.dumps({"format": 1, "now_ns": now_ns, "axes": axes}).encode()

    def close(self) -> None:
        """Stop the hosts and let their ports go."""
        for host in self._hosts:
            host.close()


def open_bench(
    rig: Rig,
    *,
    seed: int | None,
    transport: Literal["tcp", "direct"],
    state: bytes | None,
    faults: Mapping[str, Any] | None = None,
) -> WaveletBench:
    """Return a bench whose hosts answer on its own virtual clock under the rig's addresses.

    Parameters
    ----------
    rig
        With a table [bench].
    seed
        Of the simulated truth; the table's own when None.
    transport
        "tcp" (loopback sockets) or "direct" (in process); both carry the same bytes.
    state
        What `keep` of an earlier bench gave, to go on from there; else every axis has lost its reference.
    faults
        A fault script (`simulators.faults`).

    Raises
    ------
    DescriptionError
        For a table [bench], a driver or a fault script that cannot be meant.
    """
    settings = read_settings(rig)
    script = None if faults is None else read_script(faults, rig)
    kept: Any = json.loads(state) if state else {"now_ns": 0, "axes": {}}
    clock = VirtualClock(utc_ns(settings.origin_utc), kept["now_ns"])
    upsets = None if script is None else Upsets(clock, clock.step_utc)
    built = build(rig, settings, settings.seed if seed is None else seed, clock, kept["axes"], upsets)
    hosts = {
        name: serve(clock, address, instrument, transport)
        for name, (address, instrument) in built.served(rig, clock).items()
    }
    if upsets and script:
        upsets.begin(script, hosts, built.instruments, built.tracks)
    return WaveletBench(clock, built, tuple(hosts.values()))


def build(
    rig: Rig,
    settings: Settings,
    seed: int,
    clock: Clock,
    kept: Mapping[str, Mapping[str, float]],
    upsets: Upsets | None = None,
) -> Built:
    """Return the instruments of a rig; `kept` holds place and homing of axes that are known.

    Raises
    ------
    DescriptionError
        When no simulated instrument understands the driver of a device.
    """
    tracks = {name: _track(axis.limits_mm, kept.get(name)) for name, axis in rig.axes.items()}
    lights = (upsets.beam, upsets.to_monitor) if upsets else (None, None)
    truth = Truth(rig, settings, seed, tracks, *lights)
    makers = Parts(rig, settings, tracks, truth, upsets, clock).makers()
    models = {name: settings.instruments.get(name, entry.driver) for name, entry in rig.devices.items()}
    wrong = tuple(misfits(rig, settings, models, makers))
    if wrong:
        raise DescriptionError(wrong)
    instruments = {name: makers[model](name) for name, model in models.items()}
    streams = {
        name: EventStream.of(one, rig.devices[name], settings.dead_time_s, seed, clock)
        for name, one in instruments.items()
        if isinstance(one, GatedCounter) and rig.devices[name].stream is not None
    }
    return Built(instruments, tracks, truth, upsets, streams)


def _track(limits_mm: tuple[float, float], kept: Mapping[str, float] | None) -> Track:
    low_mm, high_mm = limits_mm
    if kept is None:
        return Track(low_mm + _FOUND_AT * (high_mm - low_mm), low_mm, homed=False)
    return Track(kept["place_mm"], low_mm, homed=bool(kept["homed"]))
