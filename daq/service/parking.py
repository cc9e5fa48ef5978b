"""Parking: requests over data links to stop, to rest, to shut the beam out; no safety function."""

from __future__ import annotations

import logging
from pathlib import Path

from daq.errors import DeviceError
from daq.openings import NONE, mask
from daq.sequencer import State
from daq.service.beam import let_in, shut_out
from daq.service.night import Night, tell

log = logging.getLogger(__name__)

BENCH_FILE = "bench.json"


def park(night: Night) -> None:
    """Show no slit, shut the beam out, let the detector rest; a device that does not answer is told of."""
    if night.state is not State.ENDED:
        night.state = State.PARKING
    for act in (_show_none, _shut_out):
        try:  # a mask that does not answer must not leave the beam open
            act(night)
        except DeviceError as error:
            tell(night, "could not park", text=str(error))


def _show_none(night: Night) -> None:
    predicted_s = night.devices.mask.show(mask(NONE))
    night.clock.sleep_until(night.clock.now_ns() + round(predicted_s * 1e9))


def _shut_out(night: Night) -> None:
    shut_out(night.devices)


def stop_now(night: Night) -> None:
    """Ask every axis to stop and the counter to forget its gate: requests over data links, no more."""
    for act in (night.devices.mask.stop_now, night.devices.detector.stop_now, night.devices.counter.abort):
        try:
            act()
        except DeviceError as error:
            log.warning("%s", error)


def shield(night: Night) -> None:
    """Stop, and ask for the beam to be shut out, by the shutter or, without one, by showing no slit."""
    stop_now(night)
    try:
        if night.devices.shutter is not None:
            night.devices.shutter.block()
        else:
            night.devices.mask.show(mask(NONE))
    except DeviceError as error:
        tell(night, "could not shut the beam out", text=str(error))


def unshield(night: Night) -> None:
    """Let the beam pass again."""
    let_in(night.devices, night.clock)


def keep_bench(night: Night) -> None:
    """Keep the place of a simulated bench beside the run, for a rehearsal that is resumed."""
    if night.bench is not None:
        keep_beside(night.folder, night.bench.keep())


def keep_beside(folder: Path, state: bytes) -> None:
    """Replace the side file of a simulated bench."""
    fresh = folder / (BENCH_FILE + ".new")
    try:
        fresh.write_bytes(state)
        fresh.replace(folder / BENCH_FILE)
    except OSError as error:
        log.error("the simulated bench's place could not be kept: %s", error)
