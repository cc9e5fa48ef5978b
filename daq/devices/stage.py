"""Stage: a linear axis of a controller that takes G-code words; several axes share one link."""

from __future__ import annotations

from daq.description.rig import Axis, Rig
from daq.devices.axis import LinearStage
from daq.devices.links import Link
from daq.devices.wire import Wire
from daq.ports import AxisState, Clock

NUMBER = r"[-+]?\d+\.\d{4}"
_AXIS = rf"[A-Z] {NUMBER} {NUMBER} (?:still|moving) (?:homed|lost)"
_TAKEN = r"taken|refused \d (?P<why>[^,]+)"


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


class GcodeStage(LinearStage):
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
    stop_bytes = b"M0\n"

    def __init__(self, name: str, axis: Axis, shared: SharedLink, clock: Clock) -> None:
        super().__init__(name, axis, clock)
        self._shared = shared
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
        self._forget_move()
        if self._axis.letter not in self.identity().rpartition(" ")[2]:
            raise self._error(f"the controller has no axis {self._axis.letter}: {self.identity()!r}")
        self._order("G90")

    def close(self) -> None:
        """Let the link go; never raises."""
        self._shared.close()

    def identity(self) -> str:
        """Return the controller's identity, verbatim."""
        return self._shared.link.identity

    def _look(self) -> AxisState:
        reply = self._shared.link.ask("M101", self._status, safe_to_repeat=True)
        return AxisState(
            position_mm=float(reply["target"]),
            encoder_mm=float(reply["encoder"]),
            moving=reply["motion"] == "moving",
            homed=reply["reference"] == "homed",
            alarm="" if reply["alarm"] == "none" else reply["alarm"],
        )

    def stop_now(self) -> None:
        """Stop every axis of the controller, past everything else, from any thread."""
        self._forget_move()
        self._shared.link.send_now(self.stop_bytes)

    def _send_home(self) -> None:
        self._order(f"G28 {self._axis.letter}0")

    def _send_move(self, position_mm: float) -> None:
        self._order(f"G1 {self._axis.letter}{position_mm:.4f} F{self._axis.speed_mm_s * 60:.4f}")

    def _order(self, words: str) -> None:
        # safe to repeat: positions are absolute, and looking for a reference twice finds the same one
        reply = self._shared.link.ask(words, _TAKEN, safe_to_repeat=True)
        if reply["why"]:
            raise self._error(f"the controller refused {words!r}: {reply['why']}")
