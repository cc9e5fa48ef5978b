"""Truth: what really reaches the detector, one for all devices of a bench."""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from functools import lru_cache
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray

from daq.description import Rig
from simulators.chip import Chip
from simulators.detector import draw_bunched, draw_counts
from simulators.draws import generator
from simulators.knobs import Knobs
from simulators.motion import NS, Track
from simulators.settings import ChannelSettings, Settings
from simulators.slits import Slits
from simulators.source import Factor, RandomWalk, between, linear, mean_relative

_MOVING_PARTS = 64  # parts into which a gate is cut while an axis moves


class Truth:
    """Counts as a function of where the axes were while a gate was open, and of the source.

    Parameters
    ----------
    rig, settings
        The bench as its rig file describes it, and its table [bench].
    seed
        Of the source's walk and of every count.
    tracks
        The axes by their names in the rig.
    beam, to_monitor
        What injected faults do to the light of the source, and to what of it the monitor sees.
    """

    def __init__(
        self,
        rig: Rig,
        settings: Settings,
        seed: int,
        tracks: Mapping[str, Track],
        beam: Factor | None = None,
        to_monitor: Factor | None = None,
    ) -> None:
        self._settings, self._seed = settings, seed
        self._mask, self._detector = tracks[rig.mask.axis], tracks[rig.detector.axis]
        self._source = _factors(settings, seed) + (() if beam is None else (beam,))
        self._to_monitor = self._source + (() if to_monitor is None else (to_monitor,))
        self._to_mask = self._source
        self._places = {opening: rig.mask_at_mm(opening) for opening in rig.opening_masks}
        self._mask_tolerance_mm = rig.axes[rig.mask.axis].tolerance_mm
        self._slits = Slits(rig, settings.light, seed)
        self._chip = Chip(rig, settings.chip, seed)
        self._scale_hz = settings.single_slit_rate_hz / self._slits.reference()
        self._light = lru_cache(maxsize=65_536)(self._light_hz)
        self.knobs = Knobs(settings.detector, settings.room_light_hz)
        self._gates: dict[str, list[tuple[int, float]]] = {}  # by device: opening and light of the last two

    def behind(self, factor: Factor) -> None:
        """Put something between source and mask that takes light away as a function of time."""
        self._to_mask = (*self._source, factor)

    def rates_hz(self, openings: Sequence[int], positions_mm: Sequence[float]) -> NDArray[np.float64]:
        """Return what channel 0 detects, position by opening [1/s]: no drift, dead time or chance pairs."""
        light = [[self._light(opening, place) for opening in openings] for place in positions_mm]
        first = self._settings.channels[0]
        dark_hz = self._settings.dark_rate_hz if first.sees == "detector" else 0.0
        return first.share * np.array(light).reshape(len(positions_mm), len(openings)) + dark_hz

    def counts(self, device: str, open_ns: int, close_ns: int, channel: int = 0) -> int:
        """Return what a gate of a device has counted in a channel, the same whenever it is asked for."""
        gate_s = (close_ns - open_ns) / NS
        settings, of = self._settings, self._settings.channels[channel]
        rate_hz = self._remembered(device, open_ns, self._channel_hz(of, open_ns, close_ns), channel)
        random = generator(self._seed, f"{device}/{channel}" if channel else device, open_ns)
        if of.fano > 1:
            return draw_bunched(rate_hz * gate_s, of.fano, random)
        rate_hz *= max(1.0 - settings.sag_s * rate_hz, 0.0)
        return draw_counts(rate_hz, gate_s, settings.dead_time_s, settings.dead_time_kind, random)

    def _remembered(self, device: str, open_ns: int, rate_hz: float, channel: int) -> float:
        """Return a rate with what the detector remembers of the gate before it; gates are asked in order."""
        share = self._settings.memory
        if not share or channel:
            return rate_hz
        before = [gate for gate in self._gates.get(device, []) if gate[0] < open_ns][-1:]
        self._gates[device] = [*before, (open_ns, rate_hz)]
        return rate_hz + share * (before[0][1] - rate_hz) if before else rate_hz

    def power(self, device: str, open_ns: int, close_ns: int) -> tuple[float, float, int]:
        """Return mean, variance of the mean and number of readings of a power meter between two times."""
        of = self._settings.power
        readings = max(2, round((close_ns - open_ns) / NS * of.readings_per_s))
        edges = [open_ns + (close_ns - open_ns) * part // readings for part in range(readings + 1)]
        light = [self._channel_hz(self._settings.channels[0], *edge) for edge in pairwise(edges)]
        noise = of.noise * generator(self._seed, device, open_ns).standard_normal(readings)
        taken = np.array(light) + noise
        return float(taken.mean()), float(taken.var(ddof=1)) / readings, readings

    def _channel_hz(self, channel: ChannelSettings, open_ns: int, close_ns: int) -> float:
        """Return the mean rate of events at a channel over a gate [1/s]."""
        passed = self.knobs.passed
        if channel.sees == "monitor":
            strength = passed * mean_relative(self._to_monitor, open_ns / NS, close_ns / NS)
            return channel.rate_hz * strength * (1.0 + channel.bends * strength)
        light_hz = passed * channel.share * self._mean_light_hz(open_ns, close_ns)
        if channel.sees == "detector":
            light_hz += self.knobs.room_hz
            return light_hz * self.knobs.seen(light_hz) + self._settings.dark_rate_hz * self.knobs.darker()
        signal, idler = self._settings.channels[1:3]
        singles = [self._channel_hz(one, open_ns, close_ns) for one in (signal, idler)]
        return light_hz + channel.window_s * singles[0] * singles[1]

    def shown(self, mask_mm: float) -> int | None:
        """Return the opening that the mask shows at a place, or None between openings, where all is dark."""
        for opening, place_mm in self._places.items():
            if abs(mask_mm - place_mm) <= self._mask_tolerance_mm:
                return opening
        return None

    def _mean_light_hz(self, open_ns: int, close_ns: int) -> float:
        """Return the mean of light times source over a gate, piece by piece where an axis moved [1/s]."""
        total = 0.0
        for start_ns, stop_ns in self._pieces(open_ns, close_ns):
            light_hz = self._behind_mask_hz(start_ns, stop_ns)
            if light_hz:
                total += light_hz * self._strength(start_ns, stop_ns) * (stop_ns - start_ns)
        return total / (close_ns - open_ns)

    def _behind_mask_hz(self, start_ns: int, stop_ns: int) -> float:
        """Return the light between two times, at the places of their middle, for an even source [1/s]."""
        middle_ns = (start_ns + stop_ns) // 2
        mask_mm, detector_mm = self._mask.true_mm(middle_ns), self._detector.true_mm(middle_ns)
        if not self._settings.chip.window_mm:
            opening = self.shown(mask_mm)
            return 0.0 if opening is None else self._light(opening, detector_mm)
        leg = self._mask.last_leg(middle_ns)
        light_hz = background_hz = self._settings.background_rate_hz
        for opening, share in self._chip.shares(mask_mm + self._chip.off_mm(leg)):
            behind_hz = self._light(opening, detector_mm)
            if share == 1.0:  # the whole beam: to the last digit what it is without a chip
                light_hz = behind_hz
                break
            light_hz += share * (behind_hz - background_hz)
        return light_hz * self._chip.transient(leg, start_ns, stop_ns)

    def _pieces(self, open_ns: int, close_ns: int) -> Iterator[tuple[int, int]]:
        tracks = (self._mask, self._detector)
        moments = {at for track in tracks for at in track.moments(open_ns, close_ns)}
        for start_ns, stop_ns in pairwise(sorted({open_ns, close_ns, *moments})):
            moves = any(track.true_mm(start_ns) != track.true_mm(stop_ns) for track in tracks)
            parts = _MOVING_PARTS if moves else 1
            yield from pairwise(start_ns + (stop_ns - start_ns) * part // parts for part in range(parts + 1))

    def _strength(self, start_ns: int, stop_ns: int) -> float:
        return mean_relative(self._to_mask, start_ns / NS, stop_ns / NS)

    def _light_hz(self, opening: int, position_mm: float) -> float:
        pattern = self._slits.intensity(opening, position_mm * 1e-3)
        return float(self._scale_hz * pattern) + self._settings.background_rate_hz


def _factors(settings: Settings, seed: int) -> tuple[Factor, ...]:
    source = settings.source
    found = (linear(source.linear_per_hour), RandomWalk(source.random_walk_per_sqrt_hour, seed))
    return (*found, between(source.levels)) if source.levels else found
