"""Readings as a task would get them, drawn from rates that a test gives."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

from daq.description import Measurement, Rig
from daq.records import UNPLANNED, Reading
from daq.tasks.contract import Ask, Setting, Taken
from daq.tasks.yardstick import yardstick
from tests.examples import lantern, lantern_rig

GAP_S = 1.0


def setting(
    measurement: Measurement | None = None,
    rig: Rig | None = None,
    shutter: bool = False,
    **earlier: dict[str, object],
) -> Setting:
    """Return what a task knows on the Lantern bench."""
    measurement, rig = measurement or lantern(), rig or lantern_rig()
    return Setting(measurement, rig, yardstick(measurement, rig), shutter, earlier)


def drawn(
    asks: Sequence[Ask], rate_hz: Callable[[Ask], float], random: np.random.Generator, began_s: float = 0.0
) -> list[Taken]:
    """Return visits with Poisson counts of a rate, one after another with a gap between them."""
    found, now_s = [], began_s
    for ask in asks:
        counts = int(random.poisson(rate_hz(ask) * ask.dwell_s))
        found.append((ask, reading(ask, (counts,), now_s)))
        now_s += ask.dwell_s + GAP_S
    return found


def reading(ask: Ask, values: tuple[float, ...], opened_s: float = 0.0, **more: object) -> Reading:
    """Return one reading of a visit that was asked for."""
    open_ns = round(opened_s * 1e9)
    plain = {
        "visit": UNPLANNED,
        "attempt": 1,
        "opening": ask.opening,
        "position_mm": ask.position_mm,
        "dwell_s": ask.dwell_s,
        "gate_open_ns": open_ns,
        "gate_close_ns": open_ns + round(ask.dwell_s * 1e9),
        "utc_ns": open_ns,
        "live_s": ask.dwell_s,
        "values": values,
    }
    return Reading(**plain | more)  # type: ignore[arg-type]
