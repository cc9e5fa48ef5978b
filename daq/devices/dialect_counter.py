"""Counters that a dialect file describes: gated, free-running totalisers, frequency meters."""

from __future__ import annotations

import math
import re

from daq.description.device import DeviceEntry
from daq.devices.rollover import counted_between, longest_s
from daq.devices.slices import Slices, adds_up, in_slices, whole_numbers
from daq.devices.spoken import Spoken, number
from daq.errors import DeviceError
from daq.ports import Clock, Counted

_POLL_S = 0.01
_DOUBT_S, _DOUBT = 5e-3, 1e-3  # how well the moment of a reading must be known, absolute and of the dwell


class DialectCounter:
    """A counter.

    Notes
    -----
    A gated counter opens and closes its gate itself. A running totaliser is read when the gate opens and when
    it closes, and the time between is taken from the run clock, in the middle of each question. A frequency
    meter gives a rate, and rate times gate is its count. A power meter gives a mean power.

    Parameters
    ----------
    name
        The device in the rig.
    entry
        Its address, dialect, channels, and how long its readout takes.
    clock
        The run clock.
    """

    port = "counter"

    def __init__(self, name: str, entry: DeviceEntry, clock: Clock) -> None:
        self.name = name
        self._entry, self._clock = entry, clock
        self._spoken = Spoken(name, entry, clock)
        self._words = self._spoken.dialect.counter_words
        self._running = self._words.mode == "running"
        self._dwell_s: float | None = None
        self._gate: str | None = None
        self._opened: tuple[int, tuple[int, ...]] = (0, ())
        self._closed: Counted | None = None

    def open(self) -> None:
        """Open the link and send the settings."""
        self._forget()
        self._spoken.open()
        if "setup" in self._spoken.dialect.command:
            self._spoken.ask("setup")

    def close(self) -> None:
        """Let the link go; never raises."""
        self._spoken.link.close()

    def identity(self) -> str:
        """Return the identity reply, verbatim."""
        return self._spoken.link.identity

    def arm(self, dwell_s: float) -> None:
        """Open the gate now for a dwell; never tried twice.

        Raises
        ------
        DeviceError
            When the gate cannot be counted, when the counter refuses, or when its answer leaves open whether
            it counts.
        """
        self._forget()
        most_s = longest_s(self._words.bits or 63, self._words.most_hz or 1.0) if self._running else math.inf
        if not (math.isfinite(dwell_s) and 0 < dwell_s < most_s and self._written(dwell_s)):
            raise self._error(f"a gate of {dwell_s:g} s cannot be counted; nothing was sent")
        if self._running:
            self._opened = self._look(dwell_s)
        else:
            armed = self._spoken.ask("arm", dwell=f"{dwell_s:.{self._words.dwell_decimals}f}")
            self._gate = armed.groupdict().get("gate")
            self._opened = (self._clock.now_ns(), ())
        self._dwell_s = dwell_s

    def busy(self) -> bool:
        """Return whether the gate is still open; a running totaliser is read when it is not."""
        if self._dwell_s is None:
            return False
        if self._clock.now_ns() < self._close_ns():
            return True
        if self._running:
            self._close_gate()
            return False
        if "status" not in self._spoken.dialect.command:
            return False
        return self._spoken.holds("status", "busy_when", self._spoken.ask("status"))

    def read(self) -> Counted:
        """Return what the last gate counted, waiting for what is left of the gate and its readout.

        Raises
        ------
        DeviceError
            When no gate was armed, when the count does not come, or when it belongs to another gate.
        """
        if self._dwell_s is None:
            raise self._error("there is no gate to read: none was armed, or its arming was in doubt")
        self._clock.sleep_until(self._close_ns())
        if self._running:
            self._close_gate()
        if self._closed is None:
            self._clock.sleep_until(self._close_ns() + round(self._entry.readout_s * 1e9))
            self._closed = self._counted(self._fetched(), self._dwell_s)
        return self._closed

    def abort(self) -> None:
        """Close the gate and forget what it counted."""
        self._forget()
        if "abort" in self._spoken.dialect.command:
            self._spoken.tell("abort")

    def _forget(self) -> None:
        self._dwell_s = self._gate = self._closed = None

    def _written(self, dwell_s: float) -> bool:
        """Return whether the gate survives being written with the decimals of the dialect."""
        return self._running or float(f"{dwell_s:.{self._words.dwell_decimals}f}") > 0

    def _close_ns(self) -> int:
        return self._opened[0] + round((self._dwell_s or 0.0) * 1e9)

    def _fetched(self) -> re.Match[str]:
        until_ns = self._clock.now_ns() + round(self._entry.timeout_s * 1e9)
        fetched = self._spoken.ask("fetch")
        while self._spoken.holds("fetch", "busy_when", fetched):
            if self._clock.now_ns() > until_ns:
                raise self._error("its readout does not end", kind="timeout")
            self._clock.sleep_until(self._clock.now_ns() + round(_POLL_S * 1e9))
            fetched = self._spoken.ask("fetch")
        gate = fetched.groupdict().get("gate")
        if self._gate is not None and gate is not None and int(gate) != int(self._gate):
            raise self._error(
                f"it gave the count of gate {gate} and not of gate {self._gate}", kind="garbage"
            )
        return fetched

    def _counted(self, fetched: re.Match[str], dwell_s: float) -> Counted:
        values = [number(text) for text in _values(fetched)]
        if self._words.mode == "power":
            return self._powered(fetched, values[0], dwell_s)
        live = fetched.groupdict().get("live")
        live_s = dwell_s if live is None else number(live)
        if self._words.mode == "frequency":
            values = [value * live_s for value in values]
        if not all(math.isfinite(value) and value >= 0 for value in (*values, live_s)):
            raise self._error(f"{fetched[0]!r} is no count", kind="garbage")
        whole = self._channels([round(value) for value in values])
        overflow = self._spoken.holds("fetch", "overflow_when", fetched)
        slices = self._slices(fetched, whole, overflow)
        return Counted(whole, live_s, overflow, own_live_time=live is not None, slices=slices)

    def _slices(self, fetched: re.Match[str], values: tuple[int, ...], overflow: bool) -> Slices | None:
        """Return the parts of the gate, which add up to its count unless it overflowed."""
        numbers = whole_numbers(fetched.groupdict().get("slices") or "")
        wanted = self._entry.slices
        if len(numbers) != wanted * len(values):
            raise self._error(f"it gave {len(numbers)} numbers and not {wanted} slices", kind="garbage")
        slices = in_slices(numbers, len(values))
        if not (overflow or adds_up(values, slices)):
            raise self._error("the parts of its gate do not add up to the count", kind="garbage")
        return slices

    def _powered(self, fetched: re.Match[str], mean: float, dwell_s: float) -> Counted:
        """Return a mean power with the variance of that mean and the number of its readings."""
        variance, repeats = number(fetched["variance"]), int(fetched["repeats"])
        if not (math.isfinite(mean) and math.isfinite(variance) and variance >= 0 and repeats >= 2):
            raise self._error(f"{fetched[0]!r} is no mean power of several readings", kind="garbage")
        overflow = self._spoken.holds("fetch", "overflow_when", fetched)
        return Counted((mean,), dwell_s, overflow, values_var=(variance,), repeats=repeats)

    def _look(self, dwell_s: float) -> tuple[int, tuple[int, ...]]:
        """Return when the totals were read, and the totals; raises when that moment is in doubt."""
        before_ns = self._clock.now_ns()
        fetched = self._spoken.ask("fetch")
        doubt_ns = (self._clock.now_ns() - before_ns) // 2
        if doubt_ns > max(_DOUBT_S, _DOUBT * dwell_s) * 1e9:
            raise self._error(f"when it was read is known to {doubt_ns / 1e9:.3f} s only", kind="garbage")
        return before_ns + doubt_ns, tuple(int(text) for text in _values(fetched))

    def _close_gate(self) -> None:
        if self._closed is not None:
            return
        at_ns, totals = self._look(self._dwell_s or 0.0)
        bits, opened = self._words.bits or 63, self._opened
        try:
            counts = [counted_between(*pair, bits) for pair in zip(opened[1], totals, strict=True)]
        except ValueError as error:
            raise self._error(str(error), kind="garbage") from error
        live_s = (at_ns - opened[0]) / 1e9
        late = live_s > longest_s(bits, self._words.most_hz or 1.0)
        self._closed = Counted(self._channels(counts), live_s, overflow=late)

    def _channels(self, values: list[int]) -> tuple[int, ...]:
        if len(values) != self._entry.channels:
            raise self._error(
                f"it gave {len(values)} channels and not {self._entry.channels}", kind="garbage"
            )
        return tuple(values)

    def _error(self, what: str, kind: str = "refused") -> DeviceError:
        remedy = "The stand is repeated; if it happens again, look at the counter"
        return DeviceError(what, where=f"counter {self.name}", remedy=remedy, kind=kind)


def _values(fetched: re.Match[str]) -> list[str]:
    """Return the groups `value`, or `value_1`, `value_2` ... in order."""
    groups = fetched.groupdict()
    names = [name for name in groups if re.fullmatch(r"value(_\d+)?", name)]
    return [groups[name] or "nan" for name in sorted(names, key=lambda name: int(name[6:] or 0))]
