"""Ready: what is measured before a run goes on after a long wait, because things creep when they stand still.

Two windows by the balance of their flanks, and what is counted without the light of the slits; the places are
those that `register` found.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass
from math import sqrt
from typing import Any

import numpy as np

from daq.records import CLOSED_VISIT, DARK_VISIT, FLANK_VISIT
from daq.tasks.contract import Ask, Taken
from daq.tasks.flanks import balance_mm, ramp_mm
from daq.tasks.register import FINE_S, KEY, TAKE_UP_MM

FLANK_S, DARK_S = 2.0, 10.0
LEFT, RIGHT, WITHOUT = "left", "right", "without light"
SURE, ODD = 3.0, 6.0  # standard errors
REACH = 0.8  # of half a ramp: farther off the balance of the flanks says no more than that
DIM = 0.2  # of the light that register saw on both flanks
BRIGHTER = 1.5  # times what the record of dark says

Records = Mapping[str, Mapping[str, Any]]  # bench task -> its record


@dataclass(frozen=True, slots=True)
class Readiness:
    """What was found, in words; why an axis is off its place and why it is too bright, "" where it is not."""

    said: str
    astray: str = ""
    bright: str = ""


def ready_visits(
    records: Records, limits_mm: tuple[float, float], place_mm: float, shutter: bool
) -> list[Ask]:
    """Return the visits: the flanks of the first and the last window, come to from below, then no light."""
    asks: list[Ask] = []
    for name, (left_mm, right_mm) in _flanks_mm(records).items():
        for side, at_mm in ((LEFT, left_mm), (RIGHT, right_mm)):
            via_mm = max(at_mm - TAKE_UP_MM, limits_mm[0])
            place = float(records["register"]["values"]["position_mm"])
            asks.append(
                Ask(
                    f"{side} {name}",
                    FLANK_S,
                    place,
                    place_mm=at_mm,
                    via_mm=via_mm,
                    beam="open" if shutter else "",  # a fault in the dark may have left it shut
                    reason=FLANK_VISIT,
                )
            )
    reason = DARK_VISIT if shutter else CLOSED_VISIT
    return [*asks, Ask(WITHOUT, DARK_S, place_mm, 0, beam="shut" if shutter else "", reason=reason)]


def readiness(records: Records, taken: Sequence[Taken]) -> Readiness:
    """Return what the visits say of mask and detector."""
    windows = list(_balanced(records, taken))
    lit = [one for one in windows if not one.dim]
    off = [one for one in windows if one.off and lit]
    without, bright = _without(records, taken)
    said = [one.said for one in windows] if lit else [f"no light on the flanks of {_names(windows)}"]
    flanks = said if windows else ["no record of register, so no flank was looked at"]
    return Readiness(
        f"{'; '.join([*flanks, without])}.",
        astray="" if not off else f"The mask is off its place: {'; '.join(one.said for one in off)}.",
        bright=bright,
    )


@dataclass(frozen=True, slots=True)
class _Window:
    name: str
    said: str
    off: bool
    dim: bool


def _names(windows: Sequence[_Window]) -> str:
    return " and ".join(one.name for one in windows)


def _flanks_mm(records: Records) -> dict[str, tuple[float, float]]:
    """Return where the flanks of the first and the last window stand; none without a record of register."""
    if "register" not in records:
        return {}
    found = {name: one for name, one in records["register"]["values"]["up"].items() if name != KEY}
    names = sorted(found, key=lambda name: float(found[name]["centre_mm"]))
    return {
        name: (
            round(found[name]["centre_mm"] - found[name]["width_mm"] / 2, 4),
            round(found[name]["centre_mm"] + found[name]["width_mm"] / 2, 4),
        )
        for name in (names[0], names[-1])
    }


def _balanced(records: Records, taken: Sequence[Taken]) -> Iterator[_Window]:
    """Yield how each window stands by the counts on its flanks."""
    counts = {ask.role: reading.values[0] for ask, reading in taken if ask.reason == FLANK_VISIT}
    for name in _flanks_mm(records):
        values = records["register"]["values"]
        known, scale = values["up"][name], FLANK_S / FINE_S
        behind = known["background"] * scale
        left, right = (max(counts[f"{side} {name}"] - behind, 0.0) for side in (LEFT, RIGHT))
        total, ramp = left + right, ramp_mm(known["edge_mm"])
        if total < DIM * known["height"] * scale:
            yield _Window(name, f"{name} is dark on both flanks", off=True, dim=True)
            continue
        off_mm, _ = balance_mm(left, right, ramp)
        chance_mm = float(values.get("repeat_mm", 0.0)) / sqrt(2)  # both flanks are come to on their own
        se_mm = float(np.hypot(ramp / (2 * total) * sqrt(total + 2 * behind), chance_mm))
        most_mm = min(max(float(values["margin_mm"][name]), 0.0), REACH * ramp / 2)
        off = abs(off_mm) - SURE * se_mm > most_mm
        far = abs(off_mm) > REACH * ramp / 2  # one flank is dark or wholly lit: it may be much farther
        how = f"at least {1e3 * REACH * ramp / 2:.0f}" if far else f"{1e3 * off_mm:+.1f} +- {1e3 * se_mm:.1f}"
        said = f"{name} stands {how} um off its middle"
        yield _Window(name, f"{said} ({1e3 * most_mm:.0f} allowed)", off=off, dim=False)


def _without(records: Records, taken: Sequence[Taken]) -> tuple[str, str]:
    """Return the count without light in words, and why it is too much, "" where it is not."""
    reading = next(reading for ask, reading in taken if ask.role == WITHOUT)
    shut = any(ask.reason == DARK_VISIT for ask, _ in taken)
    rate_hz, se_hz = reading.values[0] / reading.live_s, sqrt(max(reading.values[0], 1.0)) / reading.live_s
    what = "with the beam shut" if shut else "behind shut slits"
    said = f"{rate_hz:.4g} +- {se_hz:.2g} a second {what}"
    key = "dark_hz" if shut else "closed_hz"
    record = records.get("dark")
    if record is None or record["values"].get(key) is None:
        return said, ""
    known_hz, known_se = float(record["values"][key]), float(record["se"][key])
    far = rate_hz > known_hz + ODD * sqrt(se_hz**2 + known_se**2) and rate_hz > BRIGHTER * known_hz
    said = f"{said} ({known_hz:.4g} by {record['record']})"
    return said, f"Too bright without light: {said}; look for light in the room." if far else ""
