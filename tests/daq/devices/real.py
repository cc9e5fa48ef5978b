"""Instruments on real ports of every kind, in a thread of the test."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from simulators.hislip import HislipListener
from simulators.hosts import Instrument, Listener, run_real
from simulators.ports import PtyListener, listen

KINDS = ("tcp", "socket", "serial", "rfc2217", "hislip")
JOIN_S = 30.0

Port = Listener | PtyListener | HislipListener


@contextmanager
def on_port(kind: str, instrument: Instrument, folder: Path) -> Iterator[Port]:
    """Give an instrument that answers on a port of its own."""
    if kind == "hislip":
        listener: Port = HislipListener(instrument)
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
