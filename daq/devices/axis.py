"""Axis: what every stage does alike, whatever its controller speaks: limits, prediction, homing, take-up.

An axis with play is always approached from one side: a move against that side goes past its target and comes
back. A move along it waits as long, so that both take equal time, and a drift cancels.
"""

from __future__ import annotations

import math
from abc import abstractmethod
from dataclasses import replace

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
        self._turn_back_mm: float | None = None  # where to, once the axis has gone past its target
        self._settled_ns = 0

    def home(self) -> None:
        """Find the reference; returns when the axis says that it is homed and stands still."""
        low_mm, high_mm = self.limits_mm
        longest_s = 2 * (high_mm - low_mm) / self._axis.speed_mm_s + _HOMING_GRACE_S
        until_ns = self._clock.now_ns() + round(longest_s * 1e9)
        self._forget_move()
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
        past_mm, whole_s = self._past_mm(here_mm, position_mm), self._axis.move_s(position_mm - here_mm)
        if not low_mm <= past_mm <= high_mm:
            what = (
                f"a move to {position_mm:g} mm goes past it to {past_mm:g} mm, outside the limits; not sent"
            )
            raise self._error(what)
        self._send_move(past_mm)
        self._place_mm, self._settled_ns = position_mm, 0
        if not self._axis.takeup_s:
            return whole_s
        self._settled_ns = self._clock.now_ns() + round(whole_s * 1e9)
        self._turn_back_mm = position_mm if past_mm != position_mm else None
        back_s = self._axis.takeup_s / 2 + self._axis.settle_s if self._turn_back_mm is not None else 0.0
        return whole_s - back_s

    def state(self) -> AxisState:
        """Return where the axis is and what it does; one that has gone past its target is sent back now."""
        state = self._look()
        if self._turn_back_mm is not None and not (state.moving or state.alarm):
            target_mm, self._turn_back_mm = self._turn_back_mm, None
            self._send_move(target_mm)
            state = replace(self._look(), moving=True)
        if self._clock.now_ns() < self._settled_ns:
            state = replace(state, moving=True)
        if self._turn_back_mm is None and not self._settled_ns:
            self._place_mm = None if state.moving else state.encoder_mm
        return state

    def _past_mm(self, here_mm: float, target_mm: float) -> float:
        """Return where a move goes first: past its target when it would come from the wrong side."""
        way = {"up": 1.0, "down": -1.0}.get(self._axis.approach, 0.0)
        if (target_mm - here_mm) * way >= 0:
            return target_mm
        return target_mm - way * self._axis.takeup_s * self._axis.speed_mm_s / 2

    def _forget_move(self) -> None:
        """Know no longer what is under way: somebody has stopped it, or the link was opened anew."""
        self._place_mm = self._turn_back_mm = None
        self._settled_ns = 0

    @abstractmethod
    def _look(self) -> AxisState:
        """Return what the controller says of the axis."""

    @abstractmethod
    def _send_home(self) -> None:
        """Start looking for the reference."""

    @abstractmethod
    def _send_move(self, position_mm: float) -> None:
        """Start a move to a place within the limits."""

    def _error(self, what: str, kind: str = "refused") -> DeviceError:
        remedy = "Look at the axis, then home it or mend the target"
        return DeviceError(what, where=f"axis {self.name}", remedy=remedy, kind=kind)
