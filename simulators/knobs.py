"""Knobs: what a person may turn on a simulated bench, and what that does to its light and its detector."""

from __future__ import annotations

import math

from simulators.settings import DialSettings

SQRT2 = math.sqrt(2.0)


class Knobs:
    """Where every knob stands; as it is built, all is as the bench is described.

    Parameters
    ----------
    settings
        How the detector answers to its dial.
    room_light_hz
        What a light in the room adds to the detector [1/s].
    """

    def __init__(self, settings: DialSettings, room_light_hz: float) -> None:
        self._settings, self._room_light_hz = settings, room_light_hz
        self._dial: float | None = None
        self.passed = 1.0  # what attenuators before monitor and mask let through
        self.room_hz = 0.0

    def turn(self, knob: str, value: float) -> None:
        """Set a knob, as a person would."""
        if knob == "detector":
            self._dial = value
        elif knob == "attenuator":
            self.passed = value
        else:
            self.room_hz = self._room_light_hz * value

    def seen(self, rate_hz: float) -> float:
        """Return the share of a rate that the detector gives, against where its dial stood at first."""
        settings = self._settings
        if self._dial is None and not settings.sag:
            return 1.0
        dial = settings.now if self._dial is None else self._dial
        return self._gain(dial - settings.sag * rate_hz) / self._gain(settings.now)

    def darker(self) -> float:
        """Return the factor of the dark counts, against where the dial stood at first."""
        off = 0.0 if self._dial is None else self._dial - self._settings.now
        return math.exp(off / self._settings.dark_e)

    def _gain(self, dial: float) -> float:
        """Return how much a detector gives: a blurred knee, and a slope above it."""
        settings = self._settings
        over = (dial - settings.knee) / (settings.blur * SQRT2)
        return 0.5 * (1.0 + math.erf(over)) * (1.0 + settings.slope * (dial - settings.now))
