"""Bar: a rate as a line of text that a person can read from where the screws are."""

from __future__ import annotations

from math import sqrt

from daq.ports import Counted

WIDTH = 20  # the whole line fits into 80 columns
FULL, EMPTY = "#", "."


def bar(rate_hz: float, best_hz: float, width: int = WIDTH) -> str:
    """Return a bar as long as a rate is part of the best one; power below zero has none."""
    share = min(max(rate_hz / best_hz, 0.0), 1.0) if best_hz > 0 else 0.0
    filled = round(share * width)
    return FULL * filled + EMPTY * (width - filled)


def rates_hz(counted: Counted) -> tuple[float, ...]:
    """Return the rate of every channel [1/s]."""
    return tuple(value / counted.live_s for value in counted.values)


def rate_line(counted: Counted, best_hz: float) -> str:
    """Return the rate of channel 0 as a bar against the best one, its counting error, and other channels."""
    rate_hz, *others = rates_hz(counted)
    error_hz = sqrt(max(counted.values[0], 1.0)) / counted.live_s
    share = f"{100 * rate_hz / best_hz:4.0f} %" if best_hz > 0 else "     -"
    beside = "".join(f"  {place}: {other:.4g}/s" for place, other in enumerate(others, 1))
    over = "  OVERFLOW" if counted.overflow else ""
    now = f"{rate_hz:9.5g} +- {error_hz:.2g}/s"
    return f"{bar(rate_hz, best_hz)} {share} of {best_hz:.5g}/s {now}{beside}{over}"
