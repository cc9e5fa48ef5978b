"""Stage: a linear axis of a controller that takes G-code words; several axes share one link."""

from __future__ import annotations

import math

from daq.description.rig import Axis, Rig
from daq.devices.links import Link, Wire
from daq.errors import DeviceError
from daq.ports import AxisState, Clock

NUMBER = r"[-+]?\d+\.\d{4}"
_AXIS = rf"[A-Z] {NUMBER} {NUMBER} (?:still|moving) (?:homed|lost)"
_TAKEN = r"taken|refused \d (?P<why>[^,]+)"

_POLL_S = 0.1
_HOMING_GRACE_S = 10.0


class SharedLink:
    """A controller's link in the hands of all its axes: opened by the first, closed for all by any."""

    def __init__(self, link: Link) -> None:
        self.link = link
        self._open = False

    def open(self) -> None:
        """Open the link unless it is open."""
        if not self._open:
            self.link.open()
            self._open = True

    def close(self) -> None:
        """Let the link go; never raises."""
        self._open = False
        self.link.close()


class GcodeStage:
    """One axis of a G-code controller.

    Parameters
    ----------
    name
        The axis in the rig.
    axis
        Its letter, limits and speed.
    shared
        The controller's link.
    clock
        The run clock.
    """

    port = "stage"

    def __init__(self, name: str, axis: Axis, shared: SharedLink, clock: Clock) -> None:
        self.name, self.limits_mm = name, axis.limits_mm
        self._axis, self._shared, self._clock = axis, shared, clock
        self._place_mm: float | None = None  # where the next move begins, as far as is known
        before, behind = rf"(?:{_AXIS}, )*", rf"(?:, {_AXIS})*"
        self._status = (
            rf"axes {before}{axis.letter} (?P<target>{NUMBER}) (?P<encoder>{NUMBER}) "
            rf"(?P<motion>still|moving) (?P<reference>homed|lost){behind}, alarm (?P<alarm>\S+)"
        )

    @classmethod
    def of_rig(cls, name: str, rig: Rig, clock: Clock) -> tuple[GcodeStage, ...]:
        """Return a stage for every axis of one controller of a rig."""
        entry = rig.devices[name]
        wire = Wire(identity="M100", identity_reply=r"\S+ \d+ axes [A-Z]+", timeout_s=entry.timeout_s)
        shared = SharedLink(Link(clock, entry.address, wire, name))
        axes = {axis_name: axis for axis_name, axis in rig.axes.items() if axis.device == name}
        return tuple(cls(axis_name, axis, shared, clock) for axis_name, axis in axes.items())

    def open(self) -> None:
        """Open the link, see that the controller has the axis, and set absolute positions."""
        self._shared.open()
        self._place_mm = None
        if self._axis.letter not in self.identity().rpartition(" ")[2]:
            raise self._error(f"the controller has no axis {self._axis.letter}: {self.identity()!r}")
        self._order("G90")

    def close(self) -> None:
        """Let the link go; never raises."""
        self._shared.close()

    def identity(self) -> str:
        """Return the controller's identity, verbatim."""
        return self._shared.link.identity

    def home(self) -> None:
        """Find the reference; returns when the axis says that it is homed and stands still."""
        low_mm, high_mm = self.limits_mm
        longest_s = 2 * (high_mm - low_mm) / self._axis.speed_mm_s + _HOMING_GRACE_S
        until_ns = self._clock.now_ns() + round(longest_s * 1e9)
        self._order(f"G28 {self._axis.letter}0")
        state = self.state()
        while state.moving or not state.homed:
            if state.alarm:
                raise self._error(f"alarm {state.alarm} while it looked for its reference")
            if self._clock.now_ns() >= until_ns:
                raise self._error("it has not found its reference in time", kind="timeout")
            self._clock.sleep_until(self._clock.now_ns() + round(_POLL_S * 1e9))
            state = self.state()

    def start(self, position_mm: float) -> float:
        """Start a move and return how long it will take, settling included [s].

        Raises
        ------
        DeviceError
            For a target that is not finite or lies outside the limits (nothing is sent then), and when the
            controller refuses.
        """
        low_mm, high_mm = self.limits_mm
        if not (math.isfinite(position_mm) and low_mm <= position_mm <= high_mm):
            raise self._error(f"a move to {position_mm:g} mm leaves {low_mm:g} .. {high_mm:g} mm; not sent")
        here_mm = self.state().position_mm if self._place_mm is None else self._place_mm
        speed_mm_min = self._axis.speed_mm_s * 60
        self._order(f"G1 {self._axis.letter}{position_mm:.4f} F{speed_mm_min:.4f}")
        self._place_mm = position_mm
        return self._axis.move_s(position_mm - here_mm)

    def state(self) -> AxisState:
        """Return where the axis is and what it does."""
        reply = self._shared.link.ask("M101", self._status, safe_to_repeat=True)
        state = AxisState(
            position_mm=float(reply["target"]),
            encoder_mm=float(reply["encoder"]),
            moving=reply["motion"] == "moving",
            homed=reply["reference"] == "homed",
            alarm="" if reply["alarm"] == "none" else reply["alarm"],
        )
        self._place_mm = None if state.moving else state.encoder_mm
        return state

    def stop_now(self) -> None:
        """Stop every axis of the controller, past everything else, from any thread."""
        self._place_mm = None
        self._shared.link.send_now(b"M0\n")

    def _order(self, words: str) -> None:
        # safe to repeat: positions are absolute, and looking for a reference twice finds the same one
        reply = self._shared.link.ask(words, _TAKEN, safe_to_repeat=True)
        if reply["why"]:
            raise self._error(f"the controller refused {words!r}: {reply['why']}")

    def _error(self, what: str, kind: str = "refused") -> DeviceError:
        remedy = "Look at the axis, then home it or mend the target"
        return DeviceError(what, where=f"axis {self.name}", remedy=remedy, kind=kind)
