"""Instruments on real ports of every kind, in a thread of the test."""

from __future__ import annotations

import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

from simulators.hosts import Instrument, Listener, run_real
from simulators.ports import PtyListener, listen

KINDS = ("tcp", "socket", "serial", "rfc2217")
JOIN_S = 30.0


@contextmanager
def on_port(kind: str, instrument: Instrument, folder: Path) -> Iterator[Listener | PtyListener]:
    """Give an instrument that answers on a port of its own."""
    address = f"serial:{folder / 'port'}" if kind == "serial" else f"{kind}://127.0.0.1:0"
    listener, stop = listen(address, instrument), threading.Event()
    thread = threading.Thread(target=run_real, args=([listener], stop), daemon=True)
    thread.start()
    try:
        yield listener
    finally:
        stop.set()
        thread.join(JOIN_S)
