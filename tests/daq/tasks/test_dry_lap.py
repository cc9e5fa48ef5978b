"""Dry lap: a move that comes late and a stop that is astray fail it."""

from __future__ import annotations

from daq.records import Quality
from daq.tasks.contract import Taken
from daq.tasks.dry_lap import TASK
from tests.daq.tasks.made import reading, setting

KNOWN = setting()


def lap(late_s: float = 0.0, quality: Quality = Quality.GOOD) -> list[Taken]:
    """Return a lap whose moves take as long as planned, but for the last one."""
    rig, now_s, found = KNOWN.rig, 0.0, list[Taken]()
    matrix = rig.mask_move_s()
    asks = TASK.asks(KNOWN, ())[:16]
    for at, ask in enumerate(asks):
        if at:
            way_mm = abs(ask.position_mm - asks[at - 1].position_mm)
            now_s += max(matrix[asks[at - 1].opening, ask.opening], rig.detector_move_s(way_mm)) + ask.dwell_s
        last = at == len(asks) - 1
        here = {"mask": rig.mask_at_mm(ask.opening), "detector": ask.position_mm}
        more = {"encoder_mm": {axis: (place, place) for axis, place in here.items()}}
        found.append(
            (
                ask,
                reading(ask, (1,), now_s + late_s * last, quality=quality if last else Quality.GOOD, **more),
            )
        )
    return found


def test_a_lap_as_planned_passes() -> None:
    assert TASK.fit(KNOWN, lap()).verdict == "pass"


def test_a_late_move_fails() -> None:
    found = TASK.fit(KNOWN, lap(late_s=1.0))

    assert (found.verdict, found.values["slow"]) == ("fail", 1)
    assert "1 moves later" in found.sentence


def test_a_stop_astray_fails() -> None:
    found = TASK.fit(KNOWN, lap(quality=Quality.OFF_TARGET))

    assert (found.verdict, found.values["astray"]) == ("fail", 1)
