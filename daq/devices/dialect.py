"""Dialect: stages, sensors and shutters that a dialect file describes, and the driver that chooses."""

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence

from daq.description.device import DeviceEntry
from daq.description.rig import Axis, Rig
from daq.devices.axis import LinearStage
from daq.devices.dialect_counter import DialectCounter
from daq.devices.spoken import Spoken, number
from daq.devices.stage import SharedLink
from daq.errors import DeviceError
from daq.ports import AxisState, Clock, Device


class DialectStage(LinearStage):
    """One axis of a controller that a dialect file describes; `shared` is the controller's link."""

    port = "stage"

    def __init__(self, name: str, axis: Axis, spoken: Spoken, shared: SharedLink, clock: Clock) -> None:
        super().__init__(name, axis, clock)
        self._spoken, self._shared, self._words = spoken, shared, spoken.dialect.axis_words
        self._target_mm: float | None = None
        self.stop_bytes = spoken.bytes_of("stop", letter=axis.letter)

    def open(self) -> None:
        """Open the link and send the settings."""
        self._shared.open()
        self._forget_move()
        self._target_mm = None
        if "setup" in self._spoken.dialect.command:
            self._spoken.ask("setup", letter=self._axis.letter)

    def close(self) -> None:
        """Let the link go; never raises."""
        self._shared.close()

    def identity(self) -> str:
        """Return the controller's identity, verbatim."""
        return self._spoken.link.identity

    def _look(self) -> AxisState:
        spoken, reply = self._spoken, self._spoken.ask("status", letter=self._axis.letter)
        encoder_mm = number(reply["encoder"]) / self._words.device_per_mm
        target_mm = self._target_mm if self._target_mm is not None else encoder_mm
        if reply.groupdict().get("target") is not None:
            target_mm = number(reply["target"]) / self._words.device_per_mm
        alarm = spoken.dialect.command["status"].alarm_when
        return AxisState(
            position_mm=target_mm,
            encoder_mm=encoder_mm,
            moving=spoken.holds("status", "busy_when", reply),
            homed=not self._words.home_required or spoken.holds("status", "homed_when", reply),
            alarm=reply[alarm.group] if alarm is not None and alarm.holds(reply) else "",
        )

    def stop_now(self) -> None:
        """Send the stop past everything else, from any thread."""
        self._forget_move()
        self._target_mm = None
        self._shared.link.send_now(self.stop_bytes)

    def _send_home(self) -> None:
        self._target_mm = None
        if "home" in self._spoken.dialect.command:
            self._spoken.ask("home", letter=self._axis.letter)

    def _send_move(self, position_mm: float) -> None:
        scale = self._words.device_per_mm
        self._spoken.ask(
            "move",
            letter=self._axis.letter,
            position=f"{position_mm * scale:.{self._words.decimals}f}",
            speed=f"{self._axis.speed_mm_s * scale:.{self._words.decimals}f}",
            speed_per_min=f"{self._axis.speed_mm_s * scale * 60:.{self._words.decimals}f}",
        )
        self._target_mm = position_mm


class _Plain:
    """What a device with a link of its own does alike."""

    def __init__(self, name: str, entry: DeviceEntry, clock: Clock) -> None:
        self.name, self.every_s = name, entry.every_s
        self._spoken = Spoken(name, entry, clock)

    def open(self) -> None:
        """Open the link and send the settings."""
        self._spoken.open()
        if "setup" in self._spoken.dialect.command:
            self._spoken.ask("setup")

    def close(self) -> None:
        """Let the link go; never raises."""
        self._spoken.link.close()

    def identity(self) -> str:
        """Return the identity reply, verbatim."""
        return self._spoken.link.identity


class DialectSensor(_Plain):
    """A sensor or a monitor; what it could not measure is NaN."""

    port = "sensor"

    def read(self) -> Mapping[str, tuple[float, str]]:
        """Return name -> (value, unit)."""
        reply, quantities = self._spoken.ask("read"), self._spoken.dialect.quantity
        return {
            name: (math.fsum((one.offset, one.factor * number(reply[name] or "nan"))), one.unit)
            for name, one in quantities.items()
        }


class DialectShutter(_Plain):
    """Blocks the beam on request; it is moved to let the beam pass only while `armed`. No safety function."""

    port = "shutter"
    armed = False

    def block(self) -> None:
        """Block the beam."""
        self._spoken.ask("block")

    def unblock(self) -> None:
        """Let the beam pass; refused unless armed (by the run that a person armed, or by hand)."""
        if not self.armed:
            remedy = "Arm the run, or open the shutter by hand"
            raise DeviceError("the shutter is not opened: nothing is armed", where=self.name, remedy=remedy)
        self._spoken.ask("unblock")

    def state(self) -> str:
        """Return "blocked", "open" or "moving"."""
        reply = self._spoken.ask("status")
        for word, condition in (("blocked", "blocked_when"), ("open", "open_when")):
            if self._spoken.holds("status", condition, reply):
                return word
        return "moving"


class DialectDriver:
    """The driver "dialect": the kind of its file says which port it serves."""

    port = "dialect"

    @classmethod
    def of_rig(cls, name: str, rig: Rig, clock: Clock) -> Sequence[Device]:
        """Return the devices behind one entry, for a stage controller one for each of its axes."""
        entry = rig.devices[name]
        assert entry.dialect is not None
        match entry.dialect.kind:
            case "counter":
                return (DialectCounter(name, entry, clock),)
            case "sensor":
                return (DialectSensor(name, entry, clock),)
            case "shutter":
                return (DialectShutter(name, entry, clock),)
        spoken = Spoken(name, entry, clock)
        shared = SharedLink(spoken.link)
        mine = {axis_name: axis for axis_name, axis in rig.axes.items() if axis.device == name}
        return tuple(DialectStage(one, axis, spoken, shared, clock) for one, axis in mine.items())
