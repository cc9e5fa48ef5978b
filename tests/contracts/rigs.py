"""Rigs that between them hold every driver, every dialect and every simulated instrument."""

from __future__ import annotations

from typing import Any

from daq.description import Rig, parse
from daq.devices.files import with_dialects
from tests.examples import CONFIGS, changed, rig_table

_LOCAL = "tcp://127.0.0.1"


def _dialect(file: str, port: int, **more: Any) -> dict[str, Any]:
    place = {"driver": "dialect", "dialect": f"{file}.toml", "address": f"{_LOCAL}:{port}", "timeout_s": 0.5}
    return place | more


def _rig(table: dict[str, Any]) -> Rig:
    read, _ = with_dialects(table, CONFIGS / "dialects")
    return parse(read, "rig.toml", "rig")


def lantern() -> Rig:
    """Return the Lantern rig."""
    return _rig(rig_table())


def words() -> Rig:
    """Return the Lantern rig with its stages, a frequency meter, a gauge and a shutter behind dialects."""
    table = changed(
        rig_table(),
        devices__stages=_dialect("gcode-words", 7801),
        devices__counter=_dialect("scpi-frequency", 7802, readout_s=0.1),
        devices__gauge=_dialect("text-gauge", 7804, every_s=60.0),
        devices__shutter=_dialect("text-shutter", 7805),
        bench__instruments={
            "stages": "gcode-stage",
            "counter": "scpi-frequency",
            "gauge": "gauge",
            "shutter": "shutter",
        },
    )
    return _rig(table)


def sliced() -> Rig:
    """Return the Lantern rig with a monitor beside the detector, and gates in ten parts."""
    sees = [{"sees": "detector"}, {"sees": "monitor", "rate_hz": 1e5}]
    table = changed(rig_table(), devices__counter__channels=2, devices__counter__slices=10)
    return _rig(changed(table, bench__channels=sees))


def events() -> Rig:
    """Return the Lantern rig with a counter in list mode, detector and monitor, gates in ten parts."""
    sees = [{"sees": "detector"}, {"sees": "monitor", "rate_hz": 2e3}]
    counter = {
        "driver": "list-mode-counter",
        "address": f"{_LOCAL}:7802",
        "stream": f"{_LOCAL}:7807",
        "channels": 2,
        "slices": 10,
        "readout_s": 0.1,
    }
    return _rig(changed(rig_table(), devices__counter=counter, bench__channels=sees))


_REGISTERS = {
    "temperature": {"at": 0, "unit": "K", "factor": 0.01},
    "pressure": {"at": 2, "kind": "f32", "unit": "Pa"},
}


def scpi() -> Rig:
    """Return the Lantern rig with its stages behind the SCPI dialect, and Modbus sensors on both lines."""
    table = changed(
        rig_table(),
        devices__modbus={"driver": "modbus-sensor", "address": f"{_LOCAL}:7806", "registers": _REGISTERS},
        devices__line={"driver": "modbus-sensor", "address": "serial:/dev/ttyS9", "registers": _REGISTERS},
        devices__stages=_dialect("scpi-stage", 7801),
        bench__instruments={"stages": "scpi-stage"},
    )
    return _rig(table)


RIGS = {"lantern": lantern, "sliced": sliced, "events": events, "words": words, "scpi": scpi}
