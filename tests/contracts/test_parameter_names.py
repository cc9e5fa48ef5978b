"""A device's methods have the parameter names of its port: mypy lets `dwell_ms` pass for `dwell_s`."""

from __future__ import annotations

import inspect
from importlib.metadata import entry_points

import pytest

from daq import ports
from daq.devices.clock import RealClock
from daq.devices.dialect import DialectSensor, DialectShutter, DialectStage
from daq.devices.dialect_counter import DialectCounter
from daq.devices.mask import MaskTranslator
from daq.devices.registry import known_drivers
from simulators.bench import WaveletBench
from simulators.clock import VirtualClock
from tests.contracts.rigs import RIGS

PORTS = {"stage": ports.Stage, "counter": ports.Counter, "sensor": ports.Sensor, "shutter": ports.Shutter}
DRIVERS = {name: entry_points(group="tercet.devices")[name].load() for name in known_drivers()}
PAIRS: list[tuple[type, type]] = [
    *((driver, PORTS[driver.port]) for driver in DRIVERS.values() if driver.port in PORTS),
    *((made, PORTS[made.port]) for made in (DialectStage, DialectCounter, DialectSensor, DialectShutter)),
    (MaskTranslator, ports.Mask),
    (RealClock, ports.Clock),
    (VirtualClock, ports.Clock),
    (WaveletBench, ports.Bench),
]


@pytest.mark.parametrize(("made", "port"), PAIRS, ids=lambda part: part.__name__)
def test_methods_have_the_parameters_of_the_port(made: type, port: type) -> None:
    wanted = {
        name: list(inspect.signature(method).parameters)
        for name, method in inspect.getmembers(port, inspect.isfunction)
        if not name.startswith("_")
    }

    found = {name: list(inspect.signature(getattr(made, name)).parameters) for name in wanted}

    assert wanted and found == wanted


def test_every_installed_driver_stands_in_a_rig_of_the_contract_tests() -> None:
    assert {entry.driver for rig in RIGS.values() for entry in rig().devices.values()} == set(DRIVERS)
