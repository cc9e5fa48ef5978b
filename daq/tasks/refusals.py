"""Refusals: what ends a task with a sentence; nothing is moved any further."""

from __future__ import annotations

from daq.errors import DaqError
from daq.tasks.contract import Setting

DIM = 0.1  # of the described light: with less of it nothing is measured


def hopeless(task: str, what: str, remedy: str) -> DaqError:
    """Return the error that ends a task: what was seen, and what to do."""
    return DaqError(what, where=f"task {task}", remedy=remedy)


def refuse_dark(task: str, setting: Setting, brightest_hz: float) -> None:
    """Refuse what was counted at the brightest place when next to none of the described light fell there."""
    expected_hz = setting.yardstick.brightest_hz
    if brightest_hz < DIM * expected_hz:
        raise hopeless(
            task,
            f"{brightest_hz:.3g} a second were counted where {expected_hz:.3g} are described",
            "Look for the beam, the shutter and the detector, and at what the description expects",
        )
