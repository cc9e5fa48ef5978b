"""Instruments on real ports of every kind, in a thread of the test."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from daq.devices.clock import RealClock
from simulators.hislip import HislipListener
from simulators.hosts import Instrument, Listener, run_real
from simulators.ports import PtyListener, listen
from simulators.vxi11 import Vxi11Listener

KINDS = ("tcp", "socket", "serial", "rfc2217", "hislip", "vxi11")
JOIN_S = 30.0

Port = Listener | PtyListener | HislipListener | Vxi11Listener


@contextmanager
def on_port(kind: str, instrument: Instrument, folder: Path) -> Iterator[Port]:
    """Give an instrument that answers on a port of its own."""
    if kind == "hislip":
        listener: Port = HislipListener(instrument)
    elif kind == "vxi11":
        listener = Vxi11Listener(instrument, RealClock())
    else:
        listener = listen(_address(kind, folder), instrument)
    stop = threading.Event()
    thread = threading.Thread(target=run_real, args=([listener], stop), daemon=True)
    thread.start()
    try:
        yield listener
    finally:
        stop.set()
        thread.join(JOIN_S)


def _address(kind: str, folder: Path) -> str:
    return f"serial:{folder / 'port'}" if kind == "serial" else f"{kind}://127.0.0.1:0"
