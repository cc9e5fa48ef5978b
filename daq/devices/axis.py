"""Axis: what every stage does alike, whatever its controller speaks: limits, prediction, homing."""

from __future__ import annotations

import math
from abc import abstractmethod

from daq.description.rig import Axis
from daq.errors import DeviceError
from daq.ports import AxisState, Clock

_POLL_S = 0.1
_HOMING_GRACE_S = 10.0


class LinearStage:
    """One axis; who inherits sends the words.

    Parameters
    ----------
    name
        The axis in the rig.
    axis
        Its letter, limits and speed.
    clock
        The run clock.
    """

    def __init__(self, name: str, axis: Axis, clock: Clock) -> None:
        self.name, self.limits_mm = name, axis.limits_mm
        self._axis, self._clock = axis, clock
        self._place_mm: float | None = None  # where the next move begins, as far as is known

    def home(self) -> None:
        """Find the reference; returns when the axis says that it is homed and stands still."""
        low_mm, high_mm = self.limits_mm
        longest_s = 2 * (high_mm - low_mm) / self._axis.speed_mm_s + _HOMING_GRACE_S
        until_ns = self._clock.now_ns() + round(longest_s * 1e9)
        self._send_home()
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
        self._send_move(position_mm)
        self._place_mm = position_mm
        return self._axis.move_s(position_mm - here_mm)

    @abstractmethod
    def state(self) -> AxisState:
        """Return where the axis is and what it does."""

    @abstractmethod
    def _send_home(self) -> None:
        """Start looking for the reference."""

    @abstractmethod
    def _send_move(self, position_mm: float) -> None:
        """Start a move to a place within the limits."""

    def _known(self, state: AxisState) -> AxisState:
        """Return a state, having kept where the next move begins."""
        self._place_mm = None if state.moving else state.encoder_mm
        return state

    def _error(self, what: str, kind: str = "refused") -> DeviceError:
        remedy = "Look at the axis, then home it or mend the target"
        return DeviceError(what, where=f"axis {self.name}", remedy=remedy, kind=kind)
