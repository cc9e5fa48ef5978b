"""Guard: a small process that stops the stages when the program dies without a goodbye.

It holds one end of a pipe; when the other end goes away and no goodbye has come, it sends every stage its
stop over a connection of its own. It is no safety function: it asks over ordinary data links, may fail, and
does nothing about a power cut, for which the controller needs a watchdog of its own.
"""

from __future__ import annotations

import contextlib
import json
import subprocess
import sys
import threading
from collections.abc import Iterator, Sequence
from dataclasses import asdict, dataclass
from importlib import import_module

from daq.devices.clock import RealClock
from daq.errors import DaqError

GOODBYE = b"goodbye\n"

_CONNECT_S = 2.0
_LINGER_S = 10.0


@dataclass(frozen=True, slots=True)
class StopOrder:
    """What stops a controller: its name, its address, and the bytes to be sent there, as text."""

    name: str
    address: str
    text: str


class Guard:
    """The guarding process, from the program's side; it does nothing before it knows what to watch over."""

    def __init__(self) -> None:
        words = [sys.executable, "-m", "daq.devices.guard"]
        # A session of its own: Ctrl-C on the terminal is meant for the program, not for its guard.
        self.process = subprocess.Popen(words, stdin=subprocess.PIPE, start_new_session=True)

    def watch_over(self, orders: Sequence[StopOrder]) -> None:
        """Have these stages stopped from now on: they are ours, no other program can be moving them."""
        _tell(self.process, json.dumps([asdict(order) for order in orders]).encode() + b"\n")


@contextlib.contextmanager
def guarded() -> Iterator[Guard]:
    """Run a guard beside the block; a block that ends by an error nobody foresaw is no goodbye either."""
    guard = Guard()
    try:
        yield guard
    except DaqError:
        _tell(guard.process, GOODBYE)
        raise
    else:
        _tell(guard.process, GOODBYE)
    finally:
        with contextlib.suppress(OSError):
            guard.process.stdin.close()  # type: ignore[union-attr]
        with contextlib.suppress(subprocess.TimeoutExpired):
            guard.process.wait(_LINGER_S)


def _tell(process: subprocess.Popen[bytes], line: bytes) -> None:
    assert process.stdin is not None
    with contextlib.suppress(OSError):  # a guard that has died guards nothing; the run goes on
        process.stdin.write(line)
        process.stdin.flush()


def watch() -> int:
    """Wait for the goodbye or for the death of the program; return 0, or 1 when a stop could not be sent."""
    first = sys.stdin.buffer.readline()
    if first in (b"", GOODBYE):  # it never had stages of its own
        return 0
    orders = [StopOrder(**order) for order in json.loads(first)]
    _get_ready(orders)
    if sys.stdin.buffer.read().endswith(GOODBYE):
        return 0
    failures = list[str]()
    # One thread each: a controller that does not answer must not keep the others moving.
    threads = [threading.Thread(target=_stop, args=(order, failures), daemon=True) for order in orders]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join(2 * _CONNECT_S)
    names = ", ".join(order.name for order in orders)
    sys.stderr.write(f"guard: the program ended without a goodbye; stop sent to {names}\n")
    for failure in failures:
        sys.stderr.write(f"guard: {failure}. Look at the stages at once.\n")
    return 1 if failures else 0


def _get_ready(orders: Sequence[StopOrder]) -> None:
    """Import now what a stop needs: later there is no time for it."""
    if any(not order.address.startswith("tcp:") for order in orders):
        import_module("daq.devices.serials")


def _stop(order: StopOrder, failures: list[str]) -> None:
    try:
        connection = RealClock().connect(order.address, _CONNECT_S)
        connection.send(order.text.encode("ascii"))
        connection.close()
    except OSError as error:
        failures.append(f"{order.name} on {order.address} could not be stopped: {error}")


if __name__ == "__main__":
    sys.exit(watch())
