"""Registry: which drivers there are, and the devices of a rig, opened and closed."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager
from functools import cache
from importlib.metadata import EntryPoints, entry_points
from typing import Protocol, cast

from daq.description.device import DeviceEntry
from daq.description.rig import Rig
from daq.devices.guard import StopOrder, guarded
from daq.devices.mask import MaskTranslator
from daq.errors import DescriptionError
from daq.ports import Clock, Counter, Device, Devices, Sensor, Shutter, Stage

GROUP = "tercet.devices"


class Driver(Protocol):
    """What an entry point of the group names: a class for one kind of device."""

    port: str

    def of_rig(self, name: str, rig: Rig, clock: Clock) -> Sequence[Device]:
        """Return the devices behind one entry of [devices]: for a controller, one for each of its axes."""


class _Stops(Protocol):
    """A stage that says what stops it, as bytes."""

    stop_bytes: bytes


@cache  # reading the metadata of everything that is installed takes a while
def _installed() -> EntryPoints:
    return entry_points(group=GROUP)


def known_drivers() -> tuple[str, ...]:
    """Return the names of the installed drivers."""
    return tuple(sorted(_installed().names))


def device_problems(rig: Rig) -> tuple[str, ...]:
    """Return what is wrong with the devices of a rig, as sentences."""
    known = known_drivers()
    unknown = [
        f"rig {rig.name}, devices.{name}.driver: there is no driver {entry.driver!r}. "
        f"Name one of {', '.join(known) or 'none: install the program first'}."
        for name, entry in rig.devices.items()
        if entry.driver not in known
    ]
    return tuple(unknown) or tuple(_port_problems(rig))


@contextmanager
def open_devices(rig: Rig, clock: Clock) -> Iterator[Devices]:
    """Give the devices of a rig, every link open and every identity asked; closed in reverse.

    Raises
    ------
    DescriptionError
        For an unknown driver, or when the rig lacks what the sequencer needs.
    DeviceError
        When a device does not answer; those opened before are closed.
    """
    problems = device_problems(rig)
    if problems:
        raise DescriptionError(problems)
    built = [
        (_port(entry), device)
        for name, entry in rig.devices.items()
        for device in _driver(entry.driver).of_rig(name, rig, clock)
    ]
    with ExitStack() as opened:
        # In virtual time nothing can go on moving without this process.
        guard = opened.enter_context(guarded()) if clock.kind == "real" else None
        for _, device in built:
            opened.callback(device.close)
            device.open()
        if guard is not None:  # only now: a stage that another program moves is not ours to stop
            guard.watch_over(_stop_orders(rig, built))
        yield _devices(rig, built)


def _stop_orders(rig: Rig, built: Sequence[tuple[str, Device]]) -> Sequence[StopOrder]:
    """Return what stops each controller, once."""
    orders = {}
    for name, axis in rig.axes.items():
        stage = next(device for port, device in built if port == "stage" and device.name == name)
        text = cast(_Stops, stage).stop_bytes.decode("ascii")
        orders[axis.device, text] = StopOrder(axis.device, rig.devices[axis.device].address, text)
    return tuple(orders.values())


def _driver(name: str) -> Driver:
    return cast(Driver, _installed()[name].load())


def _port(entry: DeviceEntry) -> str:
    """Return the port that a device serves; a dialect's is the kind of its file."""
    return entry.dialect.kind if entry.dialect else _driver(entry.driver).port


def _port_problems(rig: Rig) -> Iterator[str]:
    ports = {name: _port(entry) for name, entry in rig.devices.items()}
    counters = [name for name, port in ports.items() if port == "counter"]
    if len(counters) != 1:
        found = ", ".join(counters) or "none"
        yield f"rig {rig.name}, devices: a rig has one counter, not {found}."
    shutters = [name for name, port in ports.items() if port == "shutter"]
    if len(shutters) > 1:
        yield f"rig {rig.name}, devices: a rig has at most one shutter, not {', '.join(shutters)}."
    for name, axis in rig.axes.items():
        if ports[axis.device] != "stage":
            where = f"rig {rig.name}, axes.{name}.device"
            yield f"{where}: {axis.device!r} moves nothing. Name a stage controller."


def _devices(rig: Rig, built: Sequence[tuple[str, Device]]) -> Devices:
    stages = {device.name: cast(Stage, device) for port, device in built if port == "stage"}
    (counter,) = (cast(Counter, device) for port, device in built if port == "counter")
    return Devices(
        mask=MaskTranslator(rig, stages[rig.mask.axis]),
        detector=stages[rig.detector.axis],
        counter=counter,
        sensors=tuple(cast(Sensor, device) for port, device in built if port == "sensor"),
        shutter=next((cast(Shutter, device) for port, device in built if port == "shutter"), None),
        stages=tuple(stages.values()),
        all=tuple(device for _, device in built),
        tolerance_mm={name: axis.tolerance_mm for name, axis in rig.axes.items()},
    )
