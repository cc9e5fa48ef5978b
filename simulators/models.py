"""Models: which simulated instrument stands at a device of a rig, wired to the truth that all share."""

from __future__ import annotations

from collections.abc import Callable, Iterator, Mapping
from dataclasses import dataclass
from functools import partial

from daq.description import Rig
from daq.ports import Clock
from simulators.counters import GatedCounter
from simulators.gauge import Gauge, ShutterBox
from simulators.hosts import Instrument
from simulators.listmode import PARTS
from simulators.modbus import ModbusRoom
from simulators.motion import Track
from simulators.powermeter import PowerMeter
from simulators.scpi_stage import ScpiStage
from simulators.sensors import RoomSensor
from simulators.settings import Settings
from simulators.stages import StageController, Travel
from simulators.totalisers import FrequencyMeter, Totaliser
from simulators.truth import Truth
from simulators.upsets import Upsets

Make = Callable[[str], Instrument]  # by the name of the device
Axes = Callable[[Mapping[str, Track], Mapping[str, Travel], Clock], Instrument]


@dataclass(frozen=True, slots=True)
class Parts:
    """What the instruments of a bench are made from."""

    rig: Rig
    settings: Settings
    tracks: Mapping[str, Track]
    truth: Truth
    upsets: Upsets | None
    clock: Clock

    def makers(self) -> dict[str, Make]:
        """Return what makes an instrument, by model; a shutter stands before the light once it is made."""
        clock = self.clock
        return {
            "gcode-stage": lambda name: self._controller(StageController, name),
            "scpi-stage": lambda name: self._controller(partial(ScpiStage, name), name),
            "scpi-counter": lambda name: self._gated(name, 1),
            "list-mode-counter": lambda name: self._gated(name, PARTS),
            "scpi-totaliser-26": lambda name: Totaliser(name, partial(self._count, name), 26, clock),
            "scpi-totaliser-32": lambda name: Totaliser(name, partial(self._count, name), 32, clock),
            "scpi-frequency": lambda name: FrequencyMeter(name, partial(self._count, name), clock),
            "scpi-power": lambda name: PowerMeter(name, partial(self.truth.power, name), clock),
            "scpi-sensor": lambda name: RoomSensor(name, clock),
            "modbus-sensor": self._modbus,
            "gauge": lambda name: Gauge(name, clock),
            "shutter": self._shutter,
        }

    def _count(self, name: str, open_ns: int, close_ns: int, channel: int = 0) -> int:
        counts = self.truth.counts(name, open_ns, close_ns, channel)
        return self.upsets.counted(name, open_ns, close_ns, counts) if self.upsets else counts

    def _gated(self, name: str, parts: int) -> Instrument:
        channels = range(self.rig.devices[name].channels)

        def counts(open_ns: int, close_ns: int) -> tuple[int, ...]:
            return tuple(self._count(name, open_ns, close_ns, channel) for channel in channels)

        return GatedCounter(name, counts, self.settings.readout_s, self.clock, parts)

    def _controller(self, make: Axes, name: str) -> Instrument:
        mine = {axis_name: axis for axis_name, axis in self.rig.axes.items() if axis.device == name}
        return make(
            {axis.letter: self.tracks[axis_name] for axis_name, axis in mine.items()},
            {axis.letter: Travel(axis.limits_mm, axis.speed_mm_s) for axis in mine.values()},
            self.clock,
        )

    def _modbus(self, name: str) -> Instrument:
        entry = self.rig.devices[name]
        return ModbusRoom(self.clock, numbered=entry.address.startswith("tcp:"), unit=entry.unit)

    def _shutter(self, name: str) -> Instrument:
        shutter = ShutterBox(self.clock)
        self.truth.behind(shutter)
        return shutter


def misfits(
    rig: Rig, settings: Settings, models: Mapping[str, str], known: Mapping[str, Make]
) -> Iterator[str]:
    """Yield a sentence for every device that no model stands for, or that sees more than [bench] tells."""
    for name, model in models.items():
        if model not in known:
            yield (
                f"rig {rig.name}, devices.{name}.driver: no simulated instrument understands {model!r}. "
                f"Name one of {', '.join(known)} for it in [bench.instruments]."
            )
    for name, entry in rig.devices.items():
        if entry.channels > len(settings.channels):
            yield (
                f"rig {rig.name}, devices.{name}.channels: [bench.channels] says what "
                f"{len(settings.channels)} of them see, not {entry.channels}. Add the others there."
            )
