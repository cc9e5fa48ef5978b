"""Joint: what is wrong between a measurement and its rig though each alone is well described."""

from __future__ import annotations

from collections.abc import Iterator

from daq import openings
from daq.description.measurement import Measurement
from daq.description.rig import Rig


def joint_problems(measurement: Measurement, rig: Rig, source: str) -> tuple[str, ...]:
    """Return what is wrong between a measurement and its rig, as sentences that begin with the file."""
    checks = (_places, _order, _dwell, _blinding, _channels)
    return tuple(f"{source}, {problem}" for check in checks for problem in check(measurement, rig))


def _places(measurement: Measurement, rig: Rig) -> Iterator[str]:
    low, high = rig.axes[rig.detector.axis].limits_mm
    outside = [place for place in measurement.positions.places_mm if not low <= place <= high]
    if outside:
        yield (
            f"positions: {outside[0]:g} mm lies outside the limits {low:g} .. {high:g} mm of axis "
            f"{rig.detector.axis!r}. Move the positions inside, or mend the limits in the rig file."
        )


def _order(measurement: Measurement, rig: Rig) -> Iterator[str]:
    given = measurement.itinerary.opening_order
    have = {openings.name(mask) for mask in rig.opening_masks}
    if given is not None and set(given) != have:
        yield (
            "itinerary.opening_order: name every opening of the mask, and no other: "
            f"{', '.join(sorted(have))}."
        )


def _dwell(measurement: Measurement, rig: Rig) -> Iterator[str]:
    dwell_s, gate_s = measurement.itinerary.dwell_s, rig.shortest_gate_s
    if dwell_s is not None and dwell_s < gate_s:
        yield (
            f"itinerary.dwell_s: the counter of the rig opens its gate for {gate_s:g} s at least, "
            f"not {dwell_s:g} s. Give a longer dwell."
        )


def _blinding(measurement: Measurement, rig: Rig) -> Iterator[str]:
    if measurement.blinding is not None and len(rig.slits) < 3:
        yield (
            f"blinding: a mask of {len(rig.slits)} slits has no third-order residual to hide. "
            "Take the table out."
        )


def _channels(measurement: Measurement, rig: Rig) -> Iterator[str]:
    channels = max(entry.channels for entry in rig.devices.values())
    for key, channel in measurement.estimate.channels_needed.items():
        if channel >= channels:
            yield (
                f"estimate.{key}: there is no channel {channel}; the counter of the rig has channels 0 to "
                f"{channels - 1}. Name one of them, or mend `channels` in the rig file."
            )
